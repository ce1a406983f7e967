"""Spread over members: labelled fronts of the moments."""

from __future__ import annotations

import numpy as np
import xarray as xr

from ensemble_horizon.checks import require_dimension, require_positive
from ensemble_horizon.errors import ArgumentError
from ensemble_horizon.spread.moments import beyond_median, member_variance
from ensemble_horizon.vocabulary import MEMBER


def spread(ensemble: xr.DataArray) -> xr.DataArray:
    """Standard deviation over members, divisor M - 1.

    Parameters
    ----------
    ensemble : DataArray (..., member, ...), any units; NaN where a member has no value

    Returns
    -------
    DataArray without ``member``, in the units of the input (temperature differences keep the
    spelling of the input's unit). Lazy where the input is lazy. NaN where fewer than two members
    have a value.

    Raises
    ------
    ArgumentError
        if there is no ``member`` dimension, or only one member.

    Examples
    --------
    >>> members = xr.DataArray([[1.0, 2.0, 4.0]], dims=("lead", "member"))
    >>> spread(members).values.round(4).tolist()
    [1.5275]
    """
    _require_members(ensemble)
    lazy = ensemble.chunk({MEMBER: -1}) if ensemble.chunks else ensemble
    result = xr.apply_ufunc(
        _standard_deviation,
        lazy,
        input_core_dims=[[MEMBER]],
        dask="parallelized",
        output_dtypes=[np.result_type(lazy.dtype, np.float32)],
        keep_attrs=True,
    )
    name = ensemble.name if ensemble.name is not None else "field"
    result.attrs.pop("standard_name", None)
    result.attrs["long_name"] = f"ensemble spread of {ensemble.attrs.get('long_name', name)}"
    result.attrs["cell_methods"] = "realization: standard_deviation"
    return result.rename(ensemble.name)


def exceedance(ensemble: xr.DataArray, beyond: float) -> xr.DataArray:
    """Share of members further than ``beyond`` from the median of the members.

    Parameters
    ----------
    ensemble : DataArray (..., member, ...)
    beyond : float above zero, in the units of the ensemble

    Returns
    -------
    DataArray without ``member``, units "1"; NaN where no member has a value.

    Examples
    --------
    >>> members = xr.DataArray([0.0, 0.1, 0.2, 5.0], dims="member")
    >>> float(exceedance(members, 1.0))
    0.25
    """
    _require_members(ensemble)
    require_positive(beyond, "beyond")
    lazy = ensemble.chunk({MEMBER: -1}) if ensemble.chunks else ensemble
    result = xr.apply_ufunc(
        _share_beyond,
        lazy,
        kwargs={"distance": float(beyond)},
        input_core_dims=[[MEMBER]],
        dask="parallelized",
        output_dtypes=[np.float64],
    )
    result.attrs = {
        "units": "1",
        "long_name": f"share of members further than {beyond:g} from the ensemble median",
    }
    return result


def _require_members(ensemble: xr.DataArray) -> None:
    require_dimension(ensemble, MEMBER, "ensemble")
    if ensemble.sizes[MEMBER] < 2:
        raise ArgumentError(
            "ensemble",
            expected="at least two members",
            found=f"{ensemble.sizes[MEMBER]}",
            remedy="open more member files; spread needs two",
        )


def _standard_deviation(values: np.ndarray) -> np.ndarray:
    floats = values.astype(np.result_type(values.dtype, np.float32), copy=False)
    return np.sqrt(member_variance(np.moveaxis(floats, -1, 0))[0])


def _share_beyond(values: np.ndarray, *, distance: float) -> np.ndarray:
    front = np.moveaxis(values, -1, 0)
    flat = front.reshape(front.shape[0], -1)
    number = np.isfinite(flat).sum(axis=0)
    with np.errstate(invalid="ignore", divide="ignore"):
        share = np.where(number > 0, beyond_median(flat, distance).sum(axis=0) / number, np.nan)
    return share.reshape(front.shape[1:])
