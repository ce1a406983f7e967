"""Curves: a field's root-mean-square over space, and over starts on request."""

from __future__ import annotations

import numpy as np
import xarray as xr

from ensemble_horizon.errors import ArgumentError
from ensemble_horizon.spread.places import Region, Site, grid_points, nearest_point, region_weights
from ensemble_horizon.vocabulary import LATITUDE, LONGITUDE, START


def area_curve(
    field: xr.DataArray,
    *,
    region: Region | None = None,
    area: xr.DataArray | None = None,
    over_starts: bool = False,
) -> xr.DataArray:
    """Root-mean-square of a spread or error field over space.

    Parameters
    ----------
    field : DataArray (..., *space), a spread or an RMS error, with ``latitude`` and ``longitude``
        coordinates on its spatial dimensions
    region : Region, optional
        Whole field where none is given.
    area : DataArray (*space), optional
        Cell areas; cos(latitude) where none are given.
    over_starts : bool
        Average over ``start`` as well.

    Returns
    -------
    DataArray without the spatial dimensions: ``sqrt(sum w E^2 / sum w)`` over the points that
    have a value. Variances are averaged, never standard deviations.

    Raises
    ------
    ArgumentError
        if the field has no latitude and longitude, or the region holds no point.

    Examples
    --------
    >>> field = xr.DataArray([[3.0, 4.0]], dims=("latitude", "longitude"),
    ...                      coords={"latitude": [0.0], "longitude": [0.0, 1.0]})
    >>> round(float(area_curve(field)), 4)
    3.5355
    """
    space = spatial_dimensions(field)
    latitude, longitude = grid_points({name: field[name] for name in (LATITUDE, LONGITUDE)})
    cells = None if area is None else area.transpose(*space).values
    flat = region_weights(region or Region("domain"), latitude, longitude, cells)
    weights = xr.DataArray(flat.reshape([field.sizes[name] for name in space]), dims=space)
    dims: list[str] = [*space, START] if over_starts and START in field.dims else list(space)
    mean = (field.astype(float) ** 2).weighted(weights).mean(dims)
    curve: xr.DataArray = mean**0.5
    return curve.rename(field.name).assign_attrs(field.attrs)


def site_curve(field: xr.DataArray, site: Site) -> xr.DataArray:
    """The field at the grid point nearest to a site.

    Raises
    ------
    ArgumentError
        if the nearest point lies beyond the site's reach.
    """
    space = spatial_dimensions(field)
    latitude, longitude = grid_points({name: field[name] for name in (LATITUDE, LONGITUDE)})
    index, _ = nearest_point(site, latitude, longitude)
    where = np.unravel_index(index, [field.sizes[name] for name in space])
    return field.isel(dict(zip(space, (int(i) for i in where), strict=True)))


def spatial_dimensions(field: xr.DataArray) -> tuple[str, ...]:
    """Spatial dimensions of a field in the order of `grid_points`: those of its coordinates.

    Raises
    ------
    ArgumentError
        if the field has no latitude and longitude.
    """
    if LATITUDE not in field.coords or LONGITUDE not in field.coords:
        raise ArgumentError(
            "field",
            expected="latitude and longitude coordinates",
            found=f"coordinates {sorted(map(str, field.coords))}",
            remedy="attach them, or use the field as a curve if it has no space",
        )
    latitude, longitude = field[LATITUDE], field[LONGITUDE]
    named = latitude.dims if latitude.dims == longitude.dims else latitude.dims + longitude.dims
    return tuple(str(name) for name in named)
