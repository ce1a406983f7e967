"""Averages of scores over starts and space."""

from __future__ import annotations

import numpy as np
import xarray as xr

from ensemble_horizon.spread.curves import spatial_dimensions
from ensemble_horizon.spread.places import Region, grid_points, region_weights
from ensemble_horizon.vocabulary import LATITUDE, LONGITUDE, START


def average(
    field: xr.DataArray,
    *,
    over_starts: bool,
    region: Region | None = None,
    area: xr.DataArray | None = None,
) -> xr.DataArray:
    """Mean of a score over starts, over a region, or over both, of the points that have a value.

    Parameters
    ----------
    field : DataArray (start, lead, *space), each dimension optional
        Squares or variances, not their roots.
    over_starts : bool
    region : Region, optional
        Every point stays on its own where none is given; ``Region("domain")`` is the whole field.
    area : DataArray (*space), optional
        Cell areas; cos(latitude) where none are given.

    Raises
    ------
    ArgumentError
        if a region is given for a field without latitude and longitude, or holds no point.

    Examples
    --------
    >>> field = xr.DataArray([[1.0, 3.0], [5.0, np.nan]], dims=("start", "lead"))
    >>> average(field, over_starts=True).values.tolist()
    [3.0, 3.0]
    """
    dims: list[str] = [START] if over_starts and START in field.dims else []
    weights = xr.DataArray(1.0)
    if region is not None:
        weights = space_weights(field, region, area)
        dims += [str(name) for name in weights.dims]
    if not dims:
        return field
    mean: xr.DataArray = field.astype(float).weighted(weights).mean(dims)
    return mean


def space_weights(
    field: xr.DataArray, region: Region, area: xr.DataArray | None = None
) -> xr.DataArray:
    """Weights (*space) of a region on the grid of a field, summing to one."""
    space = spatial_dimensions(field)
    latitude, longitude = grid_points({name: field[name] for name in (LATITUDE, LONGITUDE)})
    cells = None if area is None else area.transpose(*space).values
    flat = region_weights(region, latitude, longitude, cells)
    shape = [field.sizes[name] for name in space]
    return xr.DataArray(np.reshape(flat, shape), dims=space)
