"""Fields without runs: a climatological standard deviation, say, on the grid of the runs."""

from __future__ import annotations

import os

import numpy as np
import xarray as xr

from ensemble_horizon.errors import InputError
from ensemble_horizon.runs.decoding import PACKING, decoder
from ensemble_horizon.runs.files import FoundFile
from ensemble_horizon.runs.grids import Grid, read_grid, space_roles
from ensemble_horizon.runs.handles import LOCK, border, open_raw
from ensemble_horizon.runs.headers import HeaderReading
from ensemble_horizon.runs.levels import Level, select_level
from ensemble_horizon.runs.moments import Wanted
from ensemble_horizon.runs.recognition import LEVEL


def open_field(
    path: str | os.PathLike[str],
    variable: str,
    grid: Grid | None = None,
    level: Level = None,
) -> xr.DataArray:
    """Read one field, or one value, from a NetCDF file.

    Parameters
    ----------
    path : path
        The file.
    variable : str
        Its variable; dimensions beside the grid must have size 1, or be a level.
    grid : Grid, optional
        The grid of the runs. The field must lie on it, point by point; a single value without
        spatial dimensions fits every grid.
    level : float or mapping, optional
        Value of the vertical coordinate.

    Returns
    -------
    DataArray, float64, dimensions of the grid (none for a single value)
        With the file's attributes, units among them.

    Raises
    ------
    InputError
        If the file or the variable is missing, or the field lies on another grid.
    """
    name = os.fspath(path)
    wanted = Wanted(variables=(variable,), level=level)
    with LOCK:
        dataset = open_raw(name)
        try:
            with border(name, f"{variable!r}"):
                field, found = _read(HeaderReading(dataset, FoundFile(name), wanted), variable)
        finally:
            dataset.close()
    if grid is not None and found.dims:
        difference = grid.difference(found)
        if difference is not None:
            raise InputError(
                name,
                expected=f"{variable!r} on the grid of the runs ({grid.describe()})",
                found=difference,
                remedy="interpolate the field to the grid of the runs beforehand",
            )
    return field


def _read(reading: HeaderReading, variable: str) -> tuple[xr.DataArray, Grid]:
    stored = reading.require(variable)
    dims = tuple(stored.dimensions)
    dim_roles = {dim: reading.dim_role(dim) for dim in dims}
    places = reading.places(dims, variable)
    space = space_roles(dims, dim_roles, places)
    key: list[slice | int] = []
    for dim in dims:
        size = reading.sizes[dim]
        if dim in space:
            key.append(slice(None))
        elif size == 1:
            key.append(0)
        elif dim_roles[dim] == LEVEL:
            coordinate = reading.variables.get(dim)
            level = reading.wanted.level
            key.append(select_level(reading.path, [variable], dim, size, coordinate, level))
        else:
            raise InputError(
                reading.path,
                expected=f"{variable!r} as one field, without {dim!r}",
                found=f"{size} values along {dim!r}",
                remedy="average or select beforehand, so that one field is left",
            )
    raw = np.asarray(stored[tuple(key)] if key else stored[...])
    decode = decoder(raw.dtype, reading.attributes[variable])
    values = np.empty(raw.shape, dtype=np.float64)
    decode.decode(raw, values)
    space_dims = tuple(dim for dim in dims if dim in space)
    grid = read_grid(space_dims, space, reading.sizes, places)
    attributes = {k: v for k, v in reading.attributes[variable].items() if k not in PACKING}
    names = tuple(space[dim] for dim in space_dims)
    coords = {n: c for n, c in grid.coords.items() if set(c.dims) <= set(names)}
    return xr.DataArray(values, dims=names, coords=coords, name=variable, attrs=attributes), grid
