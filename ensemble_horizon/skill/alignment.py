"""Analyses brought to the valid times of an ensemble, or refused."""

from __future__ import annotations

from collections.abc import Callable, Hashable
from typing import Any

import numpy as np
import xarray as xr

from ensemble_horizon.errors import ArgumentError
from ensemble_horizon.runs.units import converter, same_units
from ensemble_horizon.serial.starts import start_names
from ensemble_horizon.vocabulary import HOURS, LATITUDE, LEAD, LONGITUDE, MEMBER, START, VALID

# Degrees: coordinates in single precision differ by up to this much.
_SAME_PLACE = 1e-4


def aligned(
    ensemble: xr.DataArray,
    analysis: xr.DataArray,
    argument: str = "analysis",
    *,
    lasting: bool = False,
) -> xr.DataArray:
    """The analysis on the dimensions and coordinates of the ensemble, without ``member``.

    Parameters
    ----------
    ensemble : DataArray (start, lead, member, *space), each dimension optional
    analysis : DataArray
        On dimensions of the ensemble, or on ``valid`` instead of ``start`` and ``lead``.
    argument : str, what messages call it
    lasting : bool
        Whether it may lack ``start`` and ``lead``, as a climatology does.

    Returns
    -------
    DataArray, lazy where the analysis is lazy.

    Raises
    ------
    ArgumentError
        if units, grid or times are not those of the ensemble.

    Examples
    --------
    >>> ensemble = xr.DataArray(np.zeros((2, 3)), dims=("lead", "member"),
    ...     coords={"lead": ("lead", [0.0, 6.0], {"units": "hours"}),
    ...             "start": np.datetime64("2024-01-05", "ns")})
    >>> times = np.array(["2024-01-05T00", "2024-01-05T06"], dtype="datetime64[ns]")
    >>> analysis = xr.DataArray([1.0, 2.0], dims="valid", coords={"valid": times})
    >>> aligned(ensemble, analysis).dims
    ('lead',)
    """
    _same_units(ensemble, analysis, argument)
    if VALID in analysis.dims:
        analysis = at_valid_times(valid_times(ensemble), analysis, argument)
    wanted = [name for name in ensemble.dims if name != MEMBER]
    strange = [str(name) for name in analysis.dims if name not in wanted]
    missing = [
        str(name)
        for name in wanted
        if name not in analysis.dims and not (lasting and name in (START, LEAD))
    ]
    if strange or missing:
        raise ArgumentError(
            argument,
            expected=f"dimensions {tuple(map(str, wanted))}, or {VALID} for {START} and {LEAD}",
            found=f"dimensions {tuple(map(str, analysis.dims))}",
            remedy="bring it to the grid and the times of the ensemble",
        )
    for name in analysis.dims:
        _same_labels(ensemble, analysis, name, argument)
    for name in (LATITUDE, LONGITUDE, VALID):
        if name in ensemble.coords and name in analysis.coords:
            _same_coordinate(ensemble[name], analysis[name], argument)
    order = [name for name in wanted if name in analysis.dims]
    # Labels that differ by rounding would not join: those of the ensemble stand for both.
    return analysis.transpose(*order).reset_coords(drop=True).drop_vars(order, errors="ignore")


def valid_times(ensemble: xr.DataArray) -> xr.DataArray:
    """Valid times of an ensemble: its coordinate ``valid``, or start plus lead.

    Raises
    ------
    ArgumentError
        if it has neither.
    """
    if VALID in ensemble.coords:
        return ensemble[VALID]
    known = START in ensemble.coords and LEAD in ensemble.coords
    if not known or not np.issubdtype(ensemble[START].dtype, np.datetime64):
        raise ArgumentError(
            "ensemble",
            expected=f"a coordinate {VALID}, or {START} (date and time) and {LEAD}",
            found=f"coordinates {sorted(map(str, ensemble.coords))}",
            remedy=f"attach them, or give the analysis on {START} and {LEAD}",
        )
    lead = ensemble[LEAD]
    if np.issubdtype(lead.dtype, np.timedelta64):
        return ensemble[START] + lead
    scale, _ = converter(str(lead.attrs.get("units", HOURS)), HOURS, LEAD)
    hours = np.round(lead.astype(float) * scale * 3.6e12).astype("timedelta64[ns]")
    return ensemble[START] + hours


def at_valid_times(times: xr.DataArray, analysis: xr.DataArray, argument: str) -> xr.DataArray:
    """Analyses of the series (valid, *space) at the given times, on the dimensions of these.

    Raises
    ------
    ArgumentError
        if the series lacks one of the times, or holds one twice.
    """
    if VALID not in analysis.coords:
        raise ArgumentError(
            f"{argument}[{VALID!r}]",
            expected="the valid times as coordinate",
            found="a dimension without one",
            remedy=f"attach it, for instance with .assign_coords({VALID}=...)",
        )
    held = analysis[VALID].values
    if np.unique(held).size < held.size:
        raise ArgumentError(
            f"{argument}[{VALID!r}]",
            expected="every valid time once",
            found=f"{held.size - np.unique(held).size} of {held.size} doubled",
            remedy="drop the doubled ones",
        )
    wanted = np.unique(times.values)
    lacking = wanted[~np.isin(wanted, held)]
    if lacking.size:
        names = start_names(lacking)
        span = start_names(np.array([held.min(), held.max()])) if held.size else ["nothing"] * 2
        raise ArgumentError(
            f"{argument}[{VALID!r}]",
            expected=f"an analysis at each of the {wanted.size} valid times of the ensemble",
            found=f"{lacking.size} of them missing ({', '.join(names[:3])}"
            + (" ...)" if len(names) > 3 else ")")
            + f"; the analyses run from {span[0]} to {span[1]}",
            remedy=f"give them, or leave gaps on purpose with .reindex({VALID}=...)",
        )
    plain = xr.DataArray(times.values, dims=times.dims)
    return analysis.sel({VALID: plain}).drop_vars(VALID)


def over_members(
    kernel: Callable[..., np.ndarray],
    ensemble: xr.DataArray,
    *others: xr.DataArray,
    **options: Any,
) -> xr.DataArray:
    """Apply a kernel that takes the members on the last axis; lazy where the input is lazy."""
    whole = ensemble.chunk({MEMBER: -1}) if ensemble.chunks else ensemble
    return xr.apply_ufunc(
        kernel,
        whole,
        *others,
        kwargs=options,
        input_core_dims=[[MEMBER], *[[] for _ in others]],
        join="override",
        dask="parallelized",
        output_dtypes=[np.result_type(ensemble.dtype, np.float32)],
    )


def _same_units(ensemble: xr.DataArray, analysis: xr.DataArray, argument: str) -> None:
    ours, theirs = ensemble.attrs.get("units"), analysis.attrs.get("units")
    if ours is None or theirs is None or same_units(str(ours), str(theirs)):
        return
    raise ArgumentError(
        argument,
        expected=f"units {ours!r}, those of the ensemble",
        found=f"{theirs!r}",
        remedy="convert it and set its units attribute",
    )


def _same_labels(
    ensemble: xr.DataArray, analysis: xr.DataArray, name: Hashable, argument: str
) -> None:
    if ensemble.sizes[name] != analysis.sizes[name]:
        raise ArgumentError(
            f"{argument}[{name!r}]",
            expected=f"{ensemble.sizes[name]} values, as in the ensemble",
            found=f"{analysis.sizes[name]}",
            remedy="interpolate it to the grid of the ensemble"
            if name not in (START, LEAD)
            else "give an analysis for every start and lead of the ensemble",
        )
    if name in ensemble.coords and name in analysis.coords:
        _same_coordinate(ensemble[name], analysis[name], argument)


def _same_coordinate(ours: xr.DataArray, theirs: xr.DataArray, argument: str) -> None:
    plain = [item.drop_vars(list(item.coords)) for item in (ours, theirs)]
    first, second = (item.values for item in xr.broadcast(*plain))
    if ours.name in (LATITUDE, LONGITUDE):
        turn = 360.0 if ours.name == LONGITUDE else np.inf
        apart = np.abs(first.astype(float) - second.astype(float))
        differ = ~(np.minimum(apart, np.abs(turn - apart)) <= _SAME_PLACE)
        differ &= ~(np.isnan(first) & np.isnan(second))
    else:
        differ = np.asarray(first != second)
    if not differ.any():
        return
    here = int(np.argmax(np.ravel(differ)))
    pair = [start_names(part.ravel()[here : here + 1])[0] for part in (first, second)]
    raise ArgumentError(
        f"{argument}[{ours.name!r}]",
        expected=f"the {ours.name} of the ensemble, such as {pair[0]}",
        found=f"{pair[1]} there, and {int(differ.sum())} of {differ.size} values that differ",
        remedy="interpolate it to the grid of the ensemble"
        if ours.name in (LATITUDE, LONGITUDE)
        else "give the analysis of those very times",
    )
