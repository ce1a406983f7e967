"""Spread of positions: what their units say of their geometry, and the labelled front."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import xarray as xr

from ensemble_horizon.checks import require_dimension
from ensemble_horizon.errors import ArgumentError, EnsembleHorizonError
from ensemble_horizon.runs.recognition import MARKS
from ensemble_horizon.runs.units import converter, same_units
from ensemble_horizon.spread.displacements import PLANE, SPHERE, displacements
from ensemble_horizon.spread.moments import member_variance
from ensemble_horizon.vocabulary import LATITUDE, LONGITUDE, MEMBER

_DEGREES = ("degrees", "degree", "deg", "arc_degree")


@dataclass(frozen=True)
class Geometry:
    """Where positions lie, and how many metres the unit of their displacements has.

    kind : ``SPHERE`` or ``PLANE``; metres : float, 1 on the sphere
    """

    kind: str
    metres: float = 1.0


def geometry_of(first_units: str, second_units: str, what: str) -> Geometry:
    """The geometry that the units of two coordinates tell.

    Raises
    ------
    ArgumentError
        unless the units are degrees north and degrees east, or one and the same length.

    Examples
    --------
    >>> geometry_of("degrees_north", "degrees_east", "position").kind
    'sphere'
    >>> geometry_of("km", "km", "position")
    Geometry(kind='plane', metres=1000.0)
    """
    north = first_units.lower() in (*MARKS[LATITUDE].units, *_DEGREES)
    if north and second_units.lower() in (*MARKS[LONGITUDE].units, *_DEGREES):
        return Geometry(SPHERE)
    if first_units and same_units(first_units, second_units):
        try:
            return Geometry(PLANE, converter(first_units, "m", what)[0])
        except EnsembleHorizonError:  # units that are no length
            pass
    raise ArgumentError(
        what,
        expected="a latitude in degrees_north and a longitude in degrees_east, in this order, "
        "or x and y in one and the same unit of length",
        found=f"{first_units or 'no units'!r} and {second_units or 'no units'!r}",
        remedy="name the two coordinates of one position, or correct their units attributes",
    )


def position_spread(
    first: xr.DataArray, second: xr.DataArray, *, dim: str = MEMBER
) -> xr.DataArray:
    """Root-mean-square distance of the members from their mean position, divisor M - 1, in metres.

    ``s2 = sum d_m^2 / (M - 1)``, d_m the distance of member m from the mean position: on the sphere
    (mean radius 6371 km) the great-circle distance from the mean of the unit vectors brought back
    to the sphere (Mardia and Jupp 2000, Directional Statistics, from memory); on the plane the
    straight distance from the mean of x and y, so that s2 is the sum of the two variances.

    Parameters
    ----------
    first, second : DataArray (..., dim, ...)
        Latitude and longitude with units degrees_north and degrees_east (or degrees), or x and y
        with one and the same unit of length. A position is missing where either part is NaN, or
        a latitude lies beyond 90 degrees.
    dim : str
        The dimension of the members.

    Returns
    -------
    DataArray without ``dim``, in metres; lazy where the input is lazy. NaN where fewer than two
    members have a position, or the members lie so evenly around the globe that there is no mean
    position.

    Raises
    ------
    ArgumentError
        if ``dim`` is missing or has one member, the units are neither of the two kinds, or the two
        have different coordinates.

    Examples
    --------
    >>> latitude = xr.DataArray([0.0, 0.0], dims="member", attrs={"units": "degrees_north"})
    >>> longitude = xr.DataArray([179.0, -179.0], dims="member", attrs={"units": "degrees_east"})
    >>> round(float(position_spread(latitude, longitude)) / 1000, 1)  # root(2) degrees, in km
    157.3
    """
    for name, part in (("first", first), ("second", second)):
        require_dimension(part, dim, name)
        if part.sizes[dim] < 2:
            raise ArgumentError(
                name,
                expected="at least two members",
                found=f"{part.sizes[dim]}",
                remedy="open more member files; spread needs two",
            )
    units = (str(first.attrs.get("units", "")), str(second.attrs.get("units", "")))
    geometry = geometry_of(*units, what="units of first and second")
    try:
        pair = xr.align(first, second, join="exact")
    except ValueError as error:
        raise ArgumentError(
            "first and second",
            expected="two coordinates of the same positions",
            found="different sizes or coordinates",
            remedy="take both from the same runs, for instance with xr.align",
        ) from error
    result: xr.DataArray = xr.apply_ufunc(
        _root_mean_square,
        *(part.chunk({dim: -1}) if part.chunks else part for part in pair),
        kwargs={"geometry": geometry},
        input_core_dims=[[dim], [dim]],
        dask="parallelized",
        output_dtypes=[np.result_type(first.dtype, second.dtype, np.float32)],
    )
    result.attrs = {"units": "m", "long_name": "ensemble spread of position"}
    return result.rename("position_spread")


def _root_mean_square(first: np.ndarray, second: np.ndarray, *, geometry: Geometry) -> np.ndarray:
    first, second = np.broadcast_arrays(first, second)
    front = [np.moveaxis(part, -1, 0).reshape(part.shape[-1], -1) for part in (first, second)]
    variance, _ = member_variance(*displacements(front[0], front[1], geometry.kind))
    root = np.sqrt(variance.reshape(first.shape[:-1]))
    return root * root.dtype.type(geometry.metres)
