"""Departures of a forecast from the analysis: bias and root-mean-square error."""

from __future__ import annotations

from typing import Any

import xarray as xr

from ensemble_horizon.errors import ArgumentError
from ensemble_horizon.skill.alignment import aligned
from ensemble_horizon.skill.averages import average
from ensemble_horizon.spread.places import Region
from ensemble_horizon.vocabulary import MEMBER


def bias(
    forecast: xr.DataArray,
    analysis: xr.DataArray,
    *,
    member: Any = None,
    over_starts: bool = True,
    region: Region | None = None,
    area: xr.DataArray | None = None,
) -> xr.DataArray:
    """Mean error, forecast minus analysis.

    Parameters
    ----------
    forecast : DataArray (start, lead, member, *space), each dimension optional
        An ensemble, whose mean is taken, or a single forecast.
    analysis : DataArray on the dimensions of the forecast without ``member``, or on ``valid``
    member : label of a member, optional
        The member to take instead of the mean, such as the control.
    over_starts : bool
        Average over ``start``.
    region : Region, optional
        Average over it, by area; every point stays on its own where none is given.
    area : DataArray (*space), optional
        Cell areas; cos(latitude) where none are given.

    Returns
    -------
    DataArray in the units of the forecast, without the dimensions averaged over; over the starts
    and points that have both values. Lazy where the input is lazy.

    Raises
    ------
    ArgumentError
        if there is no such member, or the analysis is in other units, on another grid or at other
        times.

    Examples
    --------
    >>> forecast = xr.DataArray([[0.0, 2.0], [3.0, 5.0]], dims=("start", "member"))
    >>> float(bias(forecast, xr.DataArray([0.0, 1.0], dims="start")))
    2.0
    """
    error = departure(forecast, analysis, member)
    mean = average(error, over_starts=over_starts, region=region, area=area)
    return mean.rename("bias").assign_attrs(
        long_name="mean error", units=forecast.attrs.get("units", "1")
    )


def rmse(
    forecast: xr.DataArray,
    analysis: xr.DataArray,
    *,
    member: Any = None,
    over_starts: bool = True,
    region: Region | None = None,
    area: xr.DataArray | None = None,
) -> xr.DataArray:
    """Root-mean-square error ``sqrt(sum w e^2 / sum w)`` of the ensemble mean or of one member.

    Squares are averaged, never roots. Parameters, result and errors as in `bias`.

    Examples
    --------
    >>> forecast = xr.DataArray([[0.0, 2.0], [3.0, 5.0]], dims=("start", "member"))
    >>> round(float(rmse(forecast, xr.DataArray([0.0, 1.0], dims="start"))), 4)
    2.2361
    >>> float(rmse(forecast, xr.DataArray([0.0, 1.0], dims="start"), member=0))  # sqrt((0 + 4)/2)
    1.41421356...
    """
    square = departure(forecast, analysis, member) ** 2
    mean = average(square, over_starts=over_starts, region=region, area=area)
    root: xr.DataArray = mean**0.5
    return root.rename("rmse").assign_attrs(
        long_name="root-mean-square error", units=forecast.attrs.get("units", "1")
    )


def departure(forecast: xr.DataArray, analysis: xr.DataArray, member: Any = None) -> xr.DataArray:
    """Error of the ensemble mean, of one member, or of a forecast without members.

    The analysis is subtracted before the mean is taken, so that single precision keeps the digits
    of a small error of a large value.
    """
    if member is not None:
        forecast = chosen_member(forecast, member)
    error = forecast - aligned(forecast, analysis)
    return error.mean(MEMBER) if MEMBER in error.dims else error


def chosen_member(ensemble: xr.DataArray, member: Any) -> xr.DataArray:
    """One member by its label; by its place where members carry no labels."""
    if MEMBER not in ensemble.dims:
        raise ArgumentError(
            "member",
            expected="an ensemble to choose a member from",
            found=f"a forecast with dimensions {tuple(map(str, ensemble.dims))}",
            remedy="leave member= out",
        )
    labels = ensemble[MEMBER].values.tolist()
    if member not in labels:
        raise ArgumentError(
            "member",
            expected=f"one of the members {labels[:8]}" + (" ..." if len(labels) > 8 else ""),
            found=repr(member),
            remedy="choose one of them",
        )
    return ensemble.isel({MEMBER: labels.index(member)}, drop=True)
