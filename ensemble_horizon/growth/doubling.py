"""Doubling times against error size: from a fitted law, and from a curve without any law.

The curve's own is the finite-size rate, lambda(E) = ln r / <time from E to r E>: Aurell, Boffetta,
Crisanti, Paladin and Vulpiani (1997), Journal of Physics A (from memory).
"""

from __future__ import annotations

import numpy as np
import xarray as xr

from ensemble_horizon.checks import require_dimension
from ensemble_horizon.errors import ArgumentError
from ensemble_horizon.growth.fitted import doubling_at
from ensemble_horizon.growth.growth import fit_growth, lead_values
from ensemble_horizon.growth.law import LN2
from ensemble_horizon.growth.units import power_of
from ensemble_horizon.vocabulary import LEAD

SIZE = "size"
DEFAULT_SIZES = 12


def crossing_times(lead: np.ndarray, curves: np.ndarray, sizes: np.ndarray) -> np.ndarray:
    """First times at which curves rise through sizes, shape (N, S).

    Parameters
    ----------
    lead : array (L,)
    curves : array (N, L)
        Error sizes; NaN are stepped over.
    sizes : array (S,)
        Sizes above zero.

    Returns
    -------
    array (N, S)
        ln E is taken as linear between leads. NaN where the curve starts at or above the size, or
        never reaches it.

    Examples
    --------
    >>> crossing_times(np.arange(3.0), np.array([[1.0, 2.0, 4.0]]), np.array([2.0, 2.0**1.5]))
    array([[1. , 1.5]])
    """
    time = np.asarray(lead, dtype=float)
    table = np.asarray(curves, dtype=float)
    result = np.full((table.shape[0], np.size(sizes)), np.nan)
    known = np.isfinite(table)
    order = np.arange(time.size)
    # Index of the last known lead before each lead; -1 where there is none.
    last = np.maximum.accumulate(np.where(known, order, -1), axis=1)
    before = np.concatenate([np.full((table.shape[0], 1), -1), last[:, :-1]], axis=1)
    rows = np.arange(table.shape[0])
    for column, size in enumerate(np.asarray(sizes, dtype=float)):
        above = known & (np.where(known, table, -np.inf) >= size)
        index = above.argmax(axis=1)
        left = before[rows, index]
        valid = above[rows, index] & (left >= 0)
        some, here, there = rows[valid], index[valid], left[valid]
        with np.errstate(divide="ignore", invalid="ignore"):
            low, high = np.log(table[some, there]), np.log(table[some, here])
            share = (np.log(size) - low) / (high - low)
        # From a size of zero or less the rise has no logarithm; it ends at the later lead.
        share = np.where(np.isfinite(share), share, 1.0)
        result[some, column] = time[there] + share * (time[here] - time[there])
    return result


def finite_size_rates(
    lead: np.ndarray, curves: np.ndarray, sizes: np.ndarray, ratio: float = 2.0
) -> np.ndarray:
    """Finite-size growth rates ln(ratio) / (time from E to ratio E), shape (N, S).

    Parameters
    ----------
    lead, curves, sizes
        As in `crossing_times`.
    ratio : float
        Above one.

    Returns
    -------
    array (N, S)
        NaN where one of the two sizes is not crossed within the curve.

    Raises
    ------
    ArgumentError
        If the ratio is not above one.

    Examples
    --------
    >>> lead = np.arange(0.0, 50.0, 6.0)
    >>> finite_size_rates(lead, np.exp(0.1 * lead)[None], np.array([2.0, 4.0]), 1.5).round(6)
    array([[0.1, 0.1]])
    """
    if not ratio > 1:
        raise ArgumentError(
            "ratio", expected="a number above 1", found=repr(ratio), remedy="take 2 for doubling"
        )
    goals = np.asarray(sizes, dtype=float)
    spent = crossing_times(lead, curves, ratio * goals) - crossing_times(lead, curves, goals)
    with np.errstate(divide="ignore", invalid="ignore"):
        return np.asarray(np.log(ratio) / spent)


def doubling_table(
    curve: xr.DataArray,
    sizes: np.ndarray | None = None,
    *,
    fit: xr.Dataset | None = None,
    law: str = "auto",
    ratio: float = 2.0,
    dim: str = LEAD,
    scale: str = "linear",
) -> xr.Dataset:
    """Doubling time and growth rate against error size.

    Parameters
    ----------
    curve : DataArray (..., lead)
        Error or spread; any other dimensions.
    sizes : array (S,), optional
        Error sizes above zero, in the units of the curve. By default twelve, from the smallest to
        half the largest value in equal ratios; finding those computes a lazy curve.
    fit : Dataset, optional
        Result of `fit_growth` for that curve; otherwise ``law`` is fitted on ``scale``.
    ratio : float
        Ratio r of the finite-size estimate.

    Returns
    -------
    Dataset (..., size)
        ``doubling_time`` (the fitted law's time from E to 2 E; infinite where 2 E lies at or above
        saturation) and ``growth_rate_finite_size``, ``doubling_time_finite_size`` (ln 2 over that
        rate) from the curve alone, NaN outside the sizes it passes through.

    Raises
    ------
    ArgumentError
        For a missing dimension, sizes not above zero, or a ratio not above one.

    Examples
    --------
    >>> lead = xr.DataArray(np.arange(0.0, 66.0, 6.0), dims="lead", attrs={"units": "hours"})
    >>> curve = xr.DataArray(0.1 * np.exp(0.1 * lead.values), coords={"lead": lead}, dims="lead")
    >>> table = doubling_table(curve, sizes=[0.2, 0.4], law="exponential")
    >>> table.doubling_time.values.round(3), table.doubling_time_finite_size.values.round(3)
    (array([6.931, 6.931]), array([6.931, 6.931]))
    """
    require_dimension(curve, dim, "curve")
    lead = lead_values(curve, dim)
    steps = _sizes(curve, sizes)
    chosen = fit_growth(curve, law, dim, scale) if fit is None else fit
    whole = curve.chunk({dim: -1}) if curve.chunks is not None else curve
    rates = xr.apply_ufunc(
        _rates_of_any_shape,
        whole,
        kwargs={"lead": lead, "sizes": steps, "ratio": ratio},
        input_core_dims=[[dim]],
        output_core_dims=[[SIZE]],
        dask="parallelized",
        output_dtypes=[np.float64],
        dask_gufunc_kwargs={"output_sizes": {SIZE: steps.size}},
    )
    lead_units = str(curve[dim].attrs.get("units", "1"))
    axis = xr.DataArray(steps, dims=SIZE, attrs={"long_name": "error size"})
    if "units" in curve.attrs:
        axis.attrs["units"] = curve.attrs["units"]
    table = xr.Dataset(
        {
            "doubling_time": doubling_at(chosen, axis),
            "growth_rate_finite_size": rates,
            "doubling_time_finite_size": LN2 / rates,
        },
        coords={SIZE: axis},
    )
    table["doubling_time"].attrs = {
        "long_name": "time from this size to twice it by the fitted law",
        "units": lead_units,
    }
    table["growth_rate_finite_size"].attrs = {
        "long_name": f"finite-size growth rate over a factor of {ratio:g}",
        "units": power_of(lead_units, -1),
    }
    table["doubling_time_finite_size"].attrs = {
        "long_name": "doubling time at the finite-size growth rate",
        "units": lead_units,
    }
    return table


def _rates_of_any_shape(
    curve: np.ndarray, *, lead: np.ndarray, sizes: np.ndarray, ratio: float
) -> np.ndarray:
    flat = curve.reshape(-1, curve.shape[-1])
    return finite_size_rates(lead, flat, sizes, ratio).reshape(*curve.shape[:-1], sizes.size)


def _sizes(curve: xr.DataArray, sizes: np.ndarray | None) -> np.ndarray:
    if sizes is None:
        values = np.asarray(curve.values, dtype=float)
        values = values[np.isfinite(values) & (values > 0)]
        if values.size == 0:
            return np.array([1.0])
        return np.geomspace(values.min(), max(values.max() / 2.0, values.min()), DEFAULT_SIZES)
    array = np.atleast_1d(np.asarray(sizes, dtype=float))
    if array.ndim != 1 or not np.all(np.isfinite(array) & (array > 0)):
        raise ArgumentError(
            "sizes",
            expected="error sizes above zero along one dimension",
            found=np.array2string(array.ravel()[:8]),
            remedy="leave out zero and negative sizes",
        )
    return array
