"""Fit laws of error growth to labelled curves."""

from __future__ import annotations

import numpy as np
import xarray as xr

from ensemble_horizon.checks import require_choice, require_dimension
from ensemble_horizon.errors import ArgumentError
from ensemble_horizon.growth.fitted import flag_of
from ensemble_horizon.growth.fitting import SCALES, Reason
from ensemble_horizon.growth.laws import LAWS
from ensemble_horizon.growth.selection import select_law
from ensemble_horizon.growth.uncertainty import doubling_error, growth_rate_error
from ensemble_horizon.growth.units import power_of, product_of
from ensemble_horizon.vocabulary import LEAD

AUTO = "auto"
QUANTITY = "quantity"
FEWEST_POINTS = 5

# Name, long name, and kind of units: rate, time, size, source, none, square or residual.
QUANTITIES = {
    "growth_rate": ("growth rate of a small error", "rate"),
    "growth_rate_se": ("standard error of the growth rate", "rate"),
    "doubling_time": ("doubling time of a small error", "time"),
    "doubling_time_se": ("standard error of the doubling time", "time"),
    "doubling_time_at_start": ("time from the initial error to twice it", "time"),
    "initial_error": ("error at lead zero by the fitted law", "size"),
    "initial_error_se": ("standard error of the initial error", "size"),
    "saturation": ("error size at which growth ends", "size"),
    "saturation_se": ("standard error of the saturation", "size"),
    "source": ("growth of error variance by model error", "source"),
    "source_se": ("standard error of the source", "source"),
    "coefficient": ("coefficient c of dE/dt = c E^(1-p)", "none"),
    "coefficient_se": ("standard error of the coefficient", "none"),
    "exponent": ("exponent p of dE/dt = c E^(1-p)", "one"),
    "exponent_se": ("standard error of the exponent", "one"),
    "rss": ("residual sum of squares on the fitted scale", "square"),
    "aicc": ("corrected Akaike criterion", "one"),
    "r_squared": ("share of the sum of squares about the mean that the fit explains", "one"),
    "rms_residual": ("root-mean-square residual on the fitted scale", "residual"),
    "points": ("number of leads used", "one"),
    "law": ("law of error growth", "flag"),
    "reason": ("why there is this fit, or none", "flag"),
}
COLUMN = {name: index for index, name in enumerate(QUANTITIES)}


def fit_growth(
    curve: xr.DataArray, law: str = AUTO, dim: str = LEAD, scale: str = "linear"
) -> xr.Dataset:
    """Fit a law of error growth to each curve of error or spread against lead time.

    Parameters
    ----------
    curve : DataArray (..., lead)
        Error or spread; any other dimensions. NaN are left out. A lazy array gives a lazy result.
    law : {"auto", "exponential", "logistic", "logistic-source", "power"}
        ``"auto"`` fits all four and keeps, for each curve, the one of least AICc.
    dim : str
        The dimension of lead times, with a numeric coordinate of at least zero.
    scale : {"linear", "log"}
        Least squares of E - f, or of ln E - ln f (which leaves out sizes of zero or less).

    Returns
    -------
    Dataset (...)
        ``growth_rate`` and ``doubling_time`` of a small error (for the power law, which knows
        none, those at the initial error), ``doubling_time_at_start`` (from E0 to 2 E0; infinite
        where 2 E0 lies above saturation), ``initial_error``, ``saturation``, ``source``,
        ``coefficient``, ``exponent`` (NaN where the law has none; an infinite saturation means
        that the curve shows none), standard errors ``*_se`` (NaN for a parameter at its bound),
        ``rss``, ``aicc``, ``r_squared``, ``rms_residual``, ``points``, and the flag variables
        ``law`` and ``reason``. Curves of fewer than five usable leads, constant curves, and,
        for laws other than the exponential, curves that do not grow have law ``none``. A curve
        that does not grow has the reason ``no_growth`` or ``constant``: rely on that rather than
        on the sign of the rate.

    Raises
    ------
    ArgumentError
        For a missing dimension or coordinate, or an unknown law or scale.

    Notes
    -----
    exponential: E = E0 exp(lambda t). logistic: dE/dt = lambda E (1 - E/Es). logistic-source:
    dV/dt = (a V + S)(1 - V/Vs), V = E^2, growth rate a/2 (Dalcher and Kalnay 1987). power:
    dE/dt = c E^(1-p), 0 < p <= 1 (Brisch and Kantz 2019). Standard errors are those of least
    squares with independent residuals, s^2 (J'J)^-1; spread at neighbouring leads is not
    independent, so take them as lower limits.

    Examples
    --------
    >>> lead = xr.DataArray(np.arange(0.0, 126.0, 6.0), dims="lead", attrs={"units": "hours"})
    >>> size = 1.0 / (1.0 + 9.0 * np.exp(-0.08 * lead.values))
    >>> fit = fit_growth(xr.DataArray(size, coords={"lead": lead}, dims="lead"), law="logistic")
    >>> round(float(fit.growth_rate), 6), fit.growth_rate.units, round(float(fit.doubling_time), 3)
    (0.08, 'hour-1', 8.664)
    """
    require_choice(law, [AUTO, *LAWS], "law")
    require_choice(scale, SCALES, "scale")
    lead = lead_values(curve, dim)
    whole = curve.chunk({dim: -1}) if curve.chunks is not None else curve
    table = xr.apply_ufunc(
        growth_table,
        whole,
        kwargs={"lead": lead, "law": law, "scale": scale},
        input_core_dims=[[dim]],
        output_core_dims=[[QUANTITY]],
        dask="parallelized",
        output_dtypes=[np.float64],
        dask_gufunc_kwargs={"output_sizes": {QUANTITY: len(QUANTITIES)}},
        keep_attrs=False,
    )
    lead_units = str(curve[dim].attrs.get("units", "1"))
    units = _units(curve.attrs.get("units"), lead_units, scale)
    fit = xr.Dataset(attrs={"fitted_scale": scale})
    for name, (long_name, kind) in QUANTITIES.items():
        part = table.isel({QUANTITY: COLUMN[name]})
        fit[name] = part.astype(np.int8) if kind == "flag" else part
        fit[name].attrs = {"long_name": long_name} | units[kind]
    fit["points"] = fit["points"].astype(np.int32).assign_attrs(fit["points"].attrs)
    fit["coefficient"].attrs["comment"] = "in units of the curve to the power p per unit of lead"
    fit["law"].attrs |= {
        "flag_values": np.arange(len(LAWS) + 1, dtype=np.int8),
        "flag_meanings": " ".join(["none", *LAWS]),
    }
    fit["reason"].attrs |= {
        "flag_values": np.array(list(Reason), dtype=np.int8),
        "flag_meanings": " ".join(reason.name for reason in Reason),
    }
    return fit


def growth_table(
    curve: np.ndarray, *, lead: np.ndarray, law: str = AUTO, scale: str = "linear"
) -> np.ndarray:
    """`fit_growth` on plain arrays: curves (..., L) give (..., Q), Q the entries of ``QUANTITIES``.

    Examples
    --------
    >>> lead = np.arange(0.0, 60.0, 6.0)
    >>> table = growth_table(np.exp(0.1 * lead), lead=lead, law="exponential")
    >>> table[COLUMN["growth_rate"]].round(6)
    np.float64(0.1)
    """
    flat = np.asarray(curve).reshape(-1, curve.shape[-1])
    result = np.full((flat.shape[0], len(QUANTITIES)), np.nan)
    result[:, COLUMN["law"]] = 0
    result[:, COLUMN["reason"]] = Reason.too_few_points
    with np.errstate(invalid="ignore"):
        usable = np.isfinite(flat) & ((flat > 0) | (scale != "log"))
    points = usable.sum(axis=1)
    result[:, COLUMN["points"]] = points
    enough = points >= FEWEST_POINTS
    if enough.any():
        part = result[enough]
        _fill(part, flat[enough], lead, law, scale)
        result[enough] = part
    return result.reshape(*curve.shape[:-1], len(QUANTITIES))


def _fill(result: np.ndarray, curves: np.ndarray, lead: np.ndarray, law: str, scale: str) -> None:
    selection = select_law(lead, curves, None if law == AUTO else [law], scale)
    result[:, COLUMN["reason"]] = selection.reason
    for index, fit in enumerate(selection.fits):
        rows = np.flatnonzero(selection.chosen == index)
        if rows.size == 0:
            continue
        record = LAWS[fit.law]
        parameters, covariance = fit.parameters[rows], fit.covariance[rows]
        errors = fit.standard_errors[rows]
        initial = record.initial_error(parameters)
        with np.errstate(divide="ignore", invalid="ignore"):
            columns = {
                "growth_rate": record.growth_rate(parameters),
                "growth_rate_se": growth_rate_error(record, parameters, covariance),
                "doubling_time": record.doubling_time(parameters),
                "doubling_time_se": doubling_error(record, parameters, covariance),
                "doubling_time_at_start": record.doubling_time(parameters, initial),
                "rss": fit.rss[rows],
                "aicc": fit.aicc[rows],
                "r_squared": 1.0 - fit.rss[rows] / fit.total[rows],
                "rms_residual": np.sqrt(fit.rss[rows] / fit.points[rows]),
                "law": np.full(rows.size, flag_of(fit.law)),
            }
        for position, name in enumerate(record.parameters):
            columns.setdefault(name, parameters[:, position])
            columns.setdefault(f"{name}_se", errors[:, position])
        for name, values in columns.items():
            result[rows, COLUMN[name]] = values


def lead_values(curve: xr.DataArray, dim: str) -> np.ndarray:
    """Lead times of a curve, shape (L,); `ArgumentError` unless they are numbers."""
    require_dimension(curve, dim, "curve")
    if dim not in curve.coords or not np.issubdtype(curve[dim].dtype, np.number):
        raise ArgumentError(
            "curve",
            expected=f"a coordinate {dim!r} of lead times as numbers",
            found="no such coordinate" if dim not in curve.coords else f"{curve[dim].dtype}",
            remedy=f"assign one, for instance with .assign_coords({dim}=hours)",
        )
    return np.asarray(curve[dim].values, dtype=float)


def _units(curve: str | None, lead: str, scale: str) -> dict[str, dict[str, str]]:
    size = {} if curve is None else {"units": str(curve)}
    square = {} if curve is None else {"units": power_of(str(curve), 2)}
    rate = power_of(lead, -1)
    log = scale == "log"
    one = {"units": "1"}
    return {
        "rate": {"units": rate},
        "time": {"units": lead},
        "size": size,
        "source": {} if curve is None else {"units": product_of(square["units"], rate)},
        "square": one if log else square,
        "residual": one if log else size,
        "one": one,
        "none": {},
        "flag": {},
    }
