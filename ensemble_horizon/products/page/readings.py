"""What a map reads out under the pointer: the grid points of a coarse raster, value by value.

The raster says which grid point lies under each of its cells; values, statuses and intervals are
those of true grid points, never averages. A grid that is finer than the raster is thinned.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np

from ensemble_horizon.products.map_legend import MapField
from ensemble_horizon.products.page.policy import packed
from ensemble_horizon.products.view import MapView
from ensemble_horizon.vocabulary import Status

_COLUMNS, _ROWS = 240, 120
# Leads travel as 16-bit steps of the run; the two highest numbers are no leads.
_STEPS, _OPEN, _NONE = 60_000, 65_534, 65_535


@dataclass(frozen=True)
class Raster:
    """The grid points that a map reads out.

    Attributes
    ----------
    columns, rows : int
        Size of the raster, north up.
    cells : (rows, columns) int
        Position in ``points`` under each cell, -1 outside the grid.
    points : (n,) int
        Flat index of the grid points.
    thinned : bool
        Whether the grid has more points than these.
    """

    columns: int
    rows: int
    cells: np.ndarray
    points: np.ndarray
    thinned: bool


def raster_of(view: MapView) -> Raster:
    """Return the raster of a view: cell for point on a small plain grid."""
    size = int(np.prod(view.shape))
    columns, rows = view.pixel_size(_COLUMNS, _ROWS)
    columns, rows = min(columns, _COLUMNS), min(rows, _ROWS)
    if view.rectilinear and len(view.shape) == 2:
        tall, wide = view.shape
        if wide <= _COLUMNS and tall <= _ROWS:
            plain = view.grid_points(wide, tall)
            if np.unique(plain).size == size:
                columns, rows = wide, tall
    found = view.grid_points(columns, rows)
    points, cells = np.unique(found[found >= 0], return_inverse=True)
    whole = np.full(found.shape, -1)
    whole[found >= 0] = cells
    return Raster(columns, rows, whole, points, points.size < size)


def grid_reading(view: MapView, raster: Raster) -> dict[str, Any]:
    """Return what all maps of a grid share: window, raster, positions of the points."""
    return {
        "columns": raster.columns,
        "rows": raster.rows,
        "window": [round(edge, 6) for edge in (view.west, view.east, view.south, view.north)],
        "geographic": view.geographic,
        "cells": packed(np.where(raster.cells < 0, _NONE, raster.cells).astype(np.uint16)),
        "x": packed(view.x.ravel()[raster.points].astype(np.float32)),
        "y": packed(view.y.ravel()[raster.points].astype(np.float32)),
    }


def map_reading(content: MapField, raster: Raster, last_lead: float) -> dict[str, Any]:
    """Return limit, interval and status of the points of a raster."""
    step = last_lead / _STEPS
    reached = content.status[raster.points] == Status.reached
    data: dict[str, Any] = {
        "step": step,
        "status": packed(content.status[raster.points].astype(np.uint8)),
        "limit": packed(_steps(np.where(reached, content.horizon[raster.points], np.nan), step)),
    }
    for name, values in (("low", content.low), ("high", content.high)):
        if values is not None:
            data[name] = packed(_steps(values[raster.points], step))
    return data


def _steps(values: np.ndarray, step: float) -> np.ndarray:
    with np.errstate(invalid="ignore"):
        whole = np.clip(np.round(values / step), 0, _STEPS)
    whole = np.where(np.isposinf(values), _OPEN, whole)
    return np.where(np.isnan(values) | np.isneginf(values), _NONE, whole).astype(np.uint16)
