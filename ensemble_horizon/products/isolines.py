"""Contour lines of a painted field: smooth, few, and with a place for their labels."""

from __future__ import annotations

from collections.abc import Sequence

import contourpy
import numpy as np

from ensemble_horizon.products.view import MapView

_BLOCK = 6
_FINE_GRID = 20_000


def contour_lines(
    view: MapView, values: np.ndarray, painted: np.ndarray, levels: tuple[float, ...]
) -> dict[float, list[np.ndarray]]:
    """Return the contour lines of each level, the longest first, specks left out.

    Coarse plain and turned grids are contoured on their own points. Fine grids and cells are
    contoured on averages of blocks of pixels: the lines are there to guide the eye, and the
    colours beneath show every grid point.

    Parameters
    ----------
    view : MapView
        The window.
    values : numpy.ndarray
        The field on its grid; NaN where it has no number.
    painted : numpy.ndarray
        The same under each pixel (height, width), north up.
    levels : tuple of float
        Levels to draw.

    Returns
    -------
    dict of float to list of numpy.ndarray
        Lines (points, 2) in window coordinates.
    """
    if not view.geographic and len(view.shape) == 1:
        return {}
    x, y, z = _native(view, values) or _blocks(view, painted)
    if min(z.shape) < 2 or not np.any(np.isfinite(z)):
        return {}
    generator = contourpy.contour_generator(x, y, np.ma.masked_invalid(z), name="serial")
    speck = 0.03 * max(view.east - view.west, view.north - view.south)
    lines: dict[float, list[np.ndarray]] = {}
    for level in levels:
        found = [np.asarray(line) for line in generator.lines(level) if len(line) > 2]
        kept = [line for line in found if np.max(np.ptp(line, axis=0)) > speck]
        lines[level] = sorted(kept, key=_length, reverse=True)
    return lines


def label_places(
    lines: dict[float, list[np.ndarray]],
    view: MapView,
    *,
    clear_of: Sequence[tuple[float, float]] = (),
    most: int = 3,
    apart: float = 0.09,
) -> list[tuple[float, float, float]]:
    """Return (level, x, y) for labels on the longest lines, clear of each other, of the
    rim and of the points ``clear_of``."""
    wide, high = view.east - view.west, view.north - view.south
    places: list[tuple[float, float, float]] = []
    for level, found in lines.items():
        count = 0
        for line in found[: 4 * most]:
            inner = (line - [view.west, view.south]) / [wide, high]
            free = np.all((inner > 0.04) & (inner < 0.96), axis=1)
            for x, y in [*clear_of, *((x, y) for _, x, y in places)]:
                near = (line - [x, y]) / [wide, high]
                free &= np.hypot(*near.T) > apart
            if count == most or not free.any():
                continue
            candidates = np.flatnonzero(free)
            middle = candidates[np.argmin(np.abs(candidates - len(line) // 2))]
            places.append((level, float(line[middle, 0]), float(line[middle, 1])))
            count += 1
    return places


def _length(line: np.ndarray) -> float:
    return float(np.hypot(*np.diff(line, axis=0).T).sum())


def _native(view: MapView, values: np.ndarray) -> tuple[np.ndarray, np.ndarray, np.ndarray] | None:
    """Return the grid itself where it is two-dimensional, coarse and not torn by a seam."""
    if len(view.shape) != 2 or values.size > _FINE_GRID or view.full_circle:
        return None
    if not (np.isfinite(view.x).all() and np.isfinite(view.y).all()):
        return None
    columns = np.argsort(view.x[0]) if view.rectilinear else np.arange(view.shape[1])
    field = values[:, columns]
    return (
        view.x[:, columns],
        view.y[:, columns],
        _smoothed(field) if min(field.shape) > 15 else field,
    )


def _blocks(view: MapView, painted: np.ndarray) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    height, width = (size // _BLOCK for size in painted.shape)
    whole = painted[: height * _BLOCK, : width * _BLOCK]
    blocks = whole.reshape(height, _BLOCK, width, _BLOCK)
    known = np.isfinite(blocks)
    count = known.sum(axis=(1, 3))
    total = np.where(known, blocks, 0.0).sum(axis=(1, 3))
    mean = np.where(count > 0.5 * _BLOCK**2, total / np.maximum(count, 1), np.nan)
    x, y = view.pixels(painted.shape[1], painted.shape[0])
    middle_x = x[: width * _BLOCK].reshape(width, _BLOCK).mean(axis=1)
    middle_y = y[: height * _BLOCK].reshape(height, _BLOCK).mean(axis=1)
    X, Y = np.meshgrid(middle_x, middle_y)
    return X, Y, _smoothed(mean)


def _smoothed(field: np.ndarray) -> np.ndarray:
    """Return the mean over each point and its eight neighbours, missing ones passed over."""
    known = np.pad(np.isfinite(field), 1)
    values = np.pad(np.where(np.isfinite(field), field, 0.0), 1)
    rows, columns = field.shape
    shifts = [(i, j) for i in range(3) for j in range(3)]
    total = sum(values[i : i + rows, j : j + columns] for i, j in shifts)
    count = sum(known[i : i + rows, j : j + columns].astype(int) for i, j in shifts)
    return np.where(np.isfinite(field), total / np.maximum(count, 1), np.nan)
