"""Grids in the maps file: dimensions and coordinates, each grid once."""

from __future__ import annotations

from typing import Any

import netCDF4
import numpy as np
import xarray as xr

from ensemble_horizon.products.netcdf import put, valid_name
from ensemble_horizon.vocabulary import (
    COORDINATE_ATTRIBUTES,
    CRITERION,
    LATITUDE,
    LEAD,
    LONGITUDE,
    START,
)

_AXES = {LATITUDE: "Y", LONGITUDE: "X", "y": "Y", "x": "X"}


class FileGrids:
    """The grids written to a file so far; ``taken`` holds the names in use."""

    def __init__(self, file: netCDF4.Dataset, taken: set[str]) -> None:
        self._file = file
        self._taken = taken
        self._grids: list[tuple[dict[str, xr.DataArray], dict[str, str]]] = []

    def names(self, maps: xr.Dataset, space: tuple[str, ...]) -> dict[str, str]:
        """Return the file's names for the dimensions and coordinates of a grid, old or new."""
        coords = {
            str(key): coordinate
            for key, coordinate in maps.coords.items()
            if coordinate.dims
            and set(coordinate.dims) <= set(space)
            and coordinate.dtype.kind in "fiu"
        }
        sizes = {key: maps.sizes[key] for key in space}
        for known, names in self._grids:
            same = set(known) == set(coords) and all(key in names for key in space)
            if (
                same
                and all(known[key].equals(coords[key]) for key in coords)
                and all(
                    self._file.dimensions[names[key]].size == size for key, size in sizes.items()
                )
            ):
                return names
        names = {key: valid_name(key, self._taken) for key in dict.fromkeys([*space, *coords])}
        for key, size in sizes.items():
            self._file.createDimension(names[key], size)
        for key, coordinate in coords.items():
            dimensions = tuple(names[str(dimension)] for dimension in coordinate.dims)
            values = (
                _steady(coordinate.values) if dimensions == (names[key],) else coordinate.values
            )
            put(self._file, names[key], dimensions, values, _coordinate_attributes(key, coordinate))
        self._grids.append((coords, names))
        return names


def space_of(maps: xr.Dataset) -> tuple[str, ...]:
    """Return the dimensions in space of a maps dataset."""
    dimensions = maps["horizon"].dims if "horizon" in maps else tuple(maps.dims)
    return tuple(str(name) for name in dimensions if name not in (START, CRITERION, LEAD))


def _steady(values: np.ndarray) -> np.ndarray:
    """Return longitudes that cross the date line as steadily rising ones, as CF asks."""
    steps = np.diff(values)
    if values.size < 2 or np.all(steps > 0) or np.all(steps < 0):
        return values
    return np.unwrap(values, period=360.0)


def _coordinate_attributes(key: str, coordinate: xr.DataArray) -> dict[str, Any]:
    attributes: dict[str, Any] = dict(COORDINATE_ATTRIBUTES.get(key, {}))
    if not attributes:
        # Projection axes would need a grid mapping, which the canonical layout does not carry.
        attributes = {
            "long_name": str(coordinate.attrs.get("long_name", f"{key} of the grid")),
            "units": str(coordinate.attrs.get("units", "1")),
        }
    if coordinate.dims == (key,) and key in _AXES:
        attributes["axis"] = _AXES[key]
    return attributes
