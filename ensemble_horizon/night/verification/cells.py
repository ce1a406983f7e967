"""Coarse cells of a grid, for which factors from spread to error are found."""

from __future__ import annotations

import numpy as np

from ensemble_horizon.night.variables import layout_of
from ensemble_horizon.runs import Catalogue
from ensemble_horizon.spread.places import area_weights, grid_points
from ensemble_horizon.spread.reduction import RegionWeights
from ensemble_horizon.vocabulary import LATITUDE, LONGITUDE


def grid_cells(catalogue: Catalogue) -> tuple[RegionWeights, ...]:
    """The blocks of the sample of the grid as regions; none without latitude and longitude."""
    if not {LATITUDE, LONGITUDE} <= set(catalogue.grid.coords):
        return ()
    weight = area_weights(grid_points(catalogue.grid.coords)[0])
    found = []
    for number, points in enumerate(_points_of_cells(catalogue)):
        index = points[weight[points] > 0]
        share = weight[index] / weight[index].sum() if index.size else weight[index]
        found.append(RegionWeights(f"cell {number}", index, share))
    return tuple(found)


def cell_middles(catalogue: Catalogue) -> tuple[np.ndarray, np.ndarray]:
    """Latitude and longitude (C,) of the middles of the cells, straight through the sphere."""
    latitude, longitude = (np.radians(item) for item in grid_points(catalogue.grid.coords))
    vectors = np.stack(
        [np.cos(latitude) * np.cos(longitude), np.cos(latitude) * np.sin(longitude),
         np.sin(latitude)]
    )  # fmt: skip
    x, y, z = np.stack(
        [vectors[:, points].mean(axis=1) for points in _points_of_cells(catalogue)], axis=1
    )
    return np.degrees(np.arctan2(z, np.hypot(x, y))), np.degrees(np.arctan2(y, x))


def _points_of_cells(catalogue: Catalogue) -> list[np.ndarray]:
    block = layout_of(catalogue).block_of_point
    return [np.flatnonzero(block == number) for number in range(int(block.max()) + 1)]
