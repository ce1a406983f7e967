"""What the laws chosen by a fit say: curves, times and rates, point by point.

A `fit_growth` dataset holds another law at every point. The functions here sort the points by law,
ask each law once, and put the answers back in place; lazy fits stay lazy.
"""

from __future__ import annotations

from collections.abc import Callable
from functools import partial

import numpy as np
import xarray as xr

from ensemble_horizon.checks import require_dimension
from ensemble_horizon.growth.law import Law
from ensemble_horizon.growth.laws import LAWS
from ensemble_horizon.vocabulary import LEAD

PARAMETERS = (
    "initial_error",
    "growth_rate",
    "saturation",
    "source",
    "coefficient",
    "exponent",
)
Question = Callable[[Law, np.ndarray, np.ndarray], np.ndarray]


def flag_of(law: str) -> int:
    """Value of the flag variable ``law`` for a law; zero stands for none.

    Examples
    --------
    >>> flag_of("exponential")
    1
    """
    return list(LAWS).index(law) + 1


def fitted_curve(fit: xr.Dataset, lead: xr.DataArray) -> xr.DataArray:
    """Error sizes by the fitted laws, dimensions of the fit and that of ``lead``.

    Parameters
    ----------
    fit : Dataset
        Result of `fit_growth`.
    lead : DataArray (L,)
        Lead times in the units of the fit.

    Returns
    -------
    DataArray
        NaN where there is no law.

    Examples
    --------
    >>> from ensemble_horizon.growth.growth import fit_growth
    >>> lead = xr.DataArray(np.arange(0.0, 66.0, 6.0), dims="lead")
    >>> curve = xr.DataArray(0.1 * np.exp(0.1 * lead.values), coords={"lead": lead}, dims="lead")
    >>> bool(abs(fitted_curve(fit_growth(curve), curve.lead) - curve).max() < 1e-8)
    True
    """
    require_dimension(lead, LEAD if LEAD in lead.dims else str(lead.dims[0]), "lead")
    dim = str(lead.dims[0])
    result = _ask(fit, lead, dim, _value)
    if "units" in fit["initial_error"].attrs:
        result.attrs["units"] = fit["initial_error"].attrs["units"]
    return result


def fitted_time_to(fit: xr.Dataset, size: xr.DataArray | float) -> xr.DataArray:
    """First lead time at which the fitted laws reach ``size``.

    Zero where the fitted error is that large from the start, infinite where it never is, NaN where
    there is no law. ``size`` may have dimensions of the fit and others.

    Examples
    --------
    >>> from ensemble_horizon.growth.growth import fit_growth
    >>> lead = xr.DataArray(np.arange(0.0, 66.0, 6.0), dims="lead")
    >>> curve = xr.DataArray(0.1 * np.exp(0.1 * lead.values), coords={"lead": lead}, dims="lead")
    >>> float(fitted_time_to(fit_growth(curve), 0.2).round(3))
    6.931
    """
    return _ask(fit, xr.DataArray(size), None, _time_to)


def doubling_at(fit: xr.Dataset, size: xr.DataArray | float) -> xr.DataArray:
    """Time the fitted laws take from ``size`` to twice it.

    Examples
    --------
    >>> from ensemble_horizon.growth.growth import fit_growth
    >>> lead = xr.DataArray(np.arange(0.0, 66.0, 6.0), dims="lead")
    >>> curve = xr.DataArray(0.1 * np.exp(0.1 * lead.values), coords={"lead": lead}, dims="lead")
    >>> float(doubling_at(fit_growth(curve), 0.5).round(3))
    6.931
    """
    return _ask(fit, xr.DataArray(size), None, _doubling)


def _ask(fit: xr.Dataset, about: xr.DataArray, dim: str | None, question: Question) -> xr.DataArray:
    core = [] if dim is None else [dim]
    parts = [fit[name] for name in PARAMETERS]
    answer: xr.DataArray = xr.apply_ufunc(
        partial(_sorted_by_law, question=question, along=dim is not None),
        fit["law"],
        *parts,
        about.drop_vars([name for name in about.coords if name not in about.dims]),
        input_core_dims=[*[[] for _ in range(len(parts) + 1)], core],
        output_core_dims=[core],
        dask="parallelized",
        output_dtypes=[np.float64],
    )
    return answer


def _sorted_by_law(
    flag: np.ndarray, *arrays: np.ndarray, question: Question, along: bool
) -> np.ndarray:
    *parameters, about = arrays
    if along:
        shape = np.broadcast_shapes(flag.shape, *(part.shape for part in parameters))
        result = np.full((*shape, about.shape[-1]), np.nan)
    else:
        shape = np.broadcast_shapes(about.shape, flag.shape)
        result = np.full(shape, np.nan)
        about = np.broadcast_to(about, shape)
    flags = np.broadcast_to(flag, shape)
    by_name = {
        name: np.broadcast_to(part, shape)
        for name, part in zip(PARAMETERS, parameters, strict=True)
    }
    for name, law in LAWS.items():
        here = flags == flag_of(name)
        if here.any():
            table = np.stack([by_name[part][here] for part in law.parameters], axis=1)
            result[here] = question(law, table, about if along else about[here])
    return result


def _value(law: Law, parameters: np.ndarray, lead: np.ndarray) -> np.ndarray:
    return law.value(parameters, np.asarray(lead).reshape(-1))


def _time_to(law: Law, parameters: np.ndarray, size: np.ndarray) -> np.ndarray:
    return law.time_to(parameters, size)


def _doubling(law: Law, parameters: np.ndarray, size: np.ndarray) -> np.ndarray:
    return law.doubling_time(parameters, size)
