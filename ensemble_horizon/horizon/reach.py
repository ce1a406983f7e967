"""Reach: how much lead a smaller initial error, or another tolerance, buys under the fitted law."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
import xarray as xr

from ensemble_horizon.checks import require_positive
from ensemble_horizon.errors import ArgumentError
from ensemble_horizon.growth.law import Law
from ensemble_horizon.growth.laws import LAWS


def reach(
    fit: xr.Dataset,
    *,
    tolerance: float | Sequence[float],
    error_factor: float | Sequence[float] = (1.0, 2.0, 10.0, 100.0),
) -> xr.Dataset:
    """Horizons of the fitted law for smaller initial errors and other tolerances.

    Parameters
    ----------
    fit : Dataset
        From `fit_growth`, any shape.
    tolerance : float or sequence (T), in the units of the curve
    error_factor : float or sequence (K)
        The initial error is divided by these.

    Returns
    -------
    Dataset on the dimensions of the fit and (tolerance, error_factor), in lead units:
    ``horizon`` (infinite where the law never gets there, because it saturates below the
    tolerance), ``gained`` over the error as it is (NaN where both are infinite), and
    ``perfect`` (without ``error_factor``): the horizon of a perfect start, which is finite for a
    power law, ``A^p/(c p)``, and where the model itself is a source of error.

    Raises
    ------
    ArgumentError
        if a tolerance or a factor is not above zero, or the fit lacks its parameters.

    Notes
    -----
    Under the exponential law a factor k buys ``ln k / rate``, whatever the tolerance (common
    practice). Nothing is bought from a law that is wrong: the fit speaks of errors between the
    smallest and the largest of its curve, and a start far below that is an extrapolation.

    Examples
    --------
    >>> fit = xr.Dataset({"initial_error": 1.0, "growth_rate": 0.5, "law": ((), 0)})
    >>> fit.law.attrs["flag_meanings"] = "exponential"; fit.law.attrs["flag_values"] = [0]
    >>> bought = reach(fit, tolerance=8.0, error_factor=[2.0])
    >>> round(bought.gained.item(), 4)  # ln 2 / 0.5
    1.3863
    """
    sizes = [require_positive(item, "tolerance") for item in np.atleast_1d(tolerance)]
    factors = [require_positive(item, "error_factor") for item in np.atleast_1d(error_factor)]
    law_flags = _law_flags(fit)
    shape = law_flags.shape
    codes = law_flags.values.ravel()
    now = np.full((codes.size, len(sizes)), np.nan)
    then = np.full((codes.size, len(sizes), len(factors)), np.nan)
    perfect = np.full_like(now, np.nan)
    for code, name in _laws_by_flag(law_flags).items():
        rows = np.flatnonzero(codes == code)
        if rows.size == 0 or name not in LAWS:
            continue
        law = LAWS[name]
        parameters = np.column_stack([_parameter(fit, key, shape)[rows] for key in law.parameters])
        for column, size in enumerate(sizes):
            now[rows, column] = law.time_to(parameters, size)
            perfect[rows, column] = law.time_to(_with_error(law, parameters, np.inf), size)
            for number, factor in enumerate(factors):
                smaller = _with_error(law, parameters, factor)
                then[rows, column, number] = law.time_to(smaller, size)
    with np.errstate(invalid="ignore"):
        gained = then - now[..., np.newaxis]
    dims = law_flags.dims
    units = fit["doubling_time"].attrs.get("units", "1") if "doubling_time" in fit else "1"
    attributes = {"units": units}
    return xr.Dataset(
        {
            "horizon": ((*dims, "tolerance", "error_factor"),
                        then.reshape(*shape, len(sizes), len(factors)), attributes),
            "gained": ((*dims, "tolerance", "error_factor"),
                       gained.reshape(*shape, len(sizes), len(factors)), attributes),
            "perfect": ((*dims, "tolerance"), perfect.reshape(*shape, len(sizes)), attributes),
        },
        coords={**law_flags.coords, "tolerance": sizes, "error_factor": factors},
    )  # fmt: skip


def _with_error(law: Law, parameters: np.ndarray, factor: float) -> np.ndarray:
    smaller = parameters.copy()
    column = law.parameters.index("initial_error")
    smaller[:, column] = 0.0 if np.isinf(factor) else parameters[:, column] / factor
    return smaller


def _law_flags(fit: xr.Dataset) -> xr.DataArray:
    if "law" not in fit or "flag_meanings" not in fit["law"].attrs:
        raise ArgumentError(
            "fit",
            expected="a dataset from fit_growth, with its law",
            found=f"variables {sorted(map(str, fit.data_vars))}",
            remedy="pass what fit_growth gave",
        )
    return fit["law"]


def _laws_by_flag(flags: xr.DataArray) -> dict[int, str]:
    names = str(flags.attrs["flag_meanings"]).split()
    values = np.atleast_1d(flags.attrs.get("flag_values", range(len(names))))
    return {int(value): name for value, name in zip(values, names, strict=True)}


def _parameter(fit: xr.Dataset, name: str, shape: tuple[int, ...]) -> np.ndarray:
    if name not in fit:
        raise ArgumentError(
            f"fit[{name!r}]",
            expected="every parameter of the law",
            found=f"variables {sorted(map(str, fit.data_vars))}",
            remedy="pass what fit_growth gave, whole",
        )
    return np.broadcast_to(fit[name].values, shape).ravel().astype(float)
