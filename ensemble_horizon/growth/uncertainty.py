"""First-order uncertainty: how fitted parameters, times and curves answer to a curve.

The delta method throughout: d theta = H d ln E with the linear map H of a Gauss-Newton step, so
that the covariance of theta is H C H' with C the covariance of ln E between leads. Residual
curvature is left out, as it is in s^2 (J'J)^-1.
"""

from __future__ import annotations

import numpy as np

from ensemble_horizon.checks import require_choice
from ensemble_horizon.errors import ArgumentError
from ensemble_horizon.growth.descent import factorise, solve, unit_scale
from ensemble_horizon.growth.law import LN2, Law
from ensemble_horizon.growth.laws import find_law

BLOCK = 4096
SCALES = ("linear", "log")


def held_parameters(law: Law | str, parameters: np.ndarray) -> np.ndarray:
    """True (N, P) where a parameter stands at its bound and so does not answer to the curve.

    An infinite saturation, a zero initial error, rate or source, an exponent of one.

    Examples
    --------
    >>> held_parameters("logistic", np.array([[0.1, 0.2, np.inf]]))
    array([[False, False,  True]])
    """
    record = find_law(law)
    table = np.atleast_2d(np.asarray(parameters, dtype=float))
    held = np.isinf(table)
    for index, name in enumerate(record.parameters):
        falls = name == "growth_rate" and record.may_fall
        if name in ("initial_error", "growth_rate", "source") and not falls:
            held[:, index] |= table[:, index] == 0
        elif name == "exponent":
            held[:, index] |= table[:, index] >= 1
    return np.asarray(held)


def parameter_sensitivity(
    law: Law | str,
    parameters: np.ndarray,
    lead: np.ndarray,
    scale: str = "linear",
    usable: np.ndarray | None = None,
) -> np.ndarray:
    """Derivatives of the fitted parameters by the logarithm of the curve at each lead.

    Parameters
    ----------
    law : Law or str
    parameters : array (N, P)
        Fitted parameters.
    lead : array (L,)
    scale : {"linear", "log"}
        The scale of the fit.
    usable : bool array (N, L) or (L,), optional
        Leads that took part in the fit; all by default.

    Returns
    -------
    array (N, P, L)
        H with d theta = H d ln E: (J'J)^-1 J' diag(f) on the linear scale, (G'G)^-1 G' with
        G = d ln f / d theta on the log scale. Rows of parameters at a bound are zero, and NaN
        where the parameters are NaN.

    Examples
    --------
    The log-linear fit of an exponential is a straight line, whose slope answers to its ends:

    >>> H = parameter_sensitivity("exponential", np.array([[1.0, 0.1]]), np.arange(3.0), "log")
    >>> (H[0, 1] + 0.0).round(6) + 0.0
    array([-0.5,  0. ,  0.5])
    """
    record = find_law(law)
    require_choice(scale, SCALES, "scale")
    table = np.atleast_2d(np.asarray(parameters, dtype=float))
    time = np.asarray(lead, dtype=float)
    result = np.empty((*table.shape, time.size))
    mask = None if usable is None else np.broadcast_to(usable, (table.shape[0], time.size))
    for first in range(0, table.shape[0], BLOCK):
        part = slice(first, first + BLOCK)
        result[part] = _sensitivity(
            record, table[part], time, scale, None if mask is None else mask[part]
        )
    return result


def _sensitivity(
    law: Law, parameters: np.ndarray, lead: np.ndarray, scale: str, usable: np.ndarray | None
) -> np.ndarray:
    held = held_parameters(law, parameters)
    with np.errstate(all="ignore"):
        value = law.value(parameters, lead)
        slope = law.jacobian(parameters, lead)
        if scale == "log":
            slope = slope / value[:, None]
        slope[held] = 0.0
        if usable is not None:
            slope = np.where(usable[:, None], slope, 0.0)
        normal = np.einsum("nil,njl->ijn", slope, slope)
        matrix, unit = unit_scale(normal, ~held.T)
        for i in range(unit.shape[0]):
            matrix[i, i] = 1.0
        factor = factorise(matrix)[..., None]
        scaled = np.moveaxis(slope, 0, 1) * unit[..., None]
        result = np.moveaxis(solve(factor, scaled) * unit[..., None], 1, 0)
        return np.asarray(result * value[:, None] if scale == "linear" else result)


def delta_covariance(sensitivity: np.ndarray, covariance: np.ndarray) -> np.ndarray:
    """Covariance H C H' of the parameters, shape (N, P, P).

    Parameters
    ----------
    sensitivity : array (N, P, L)
        H of `parameter_sensitivity`.
    covariance : array (L, L) or (N, L, L)
        Covariance C of ln E between leads, one for all curves or one for each.

    Raises
    ------
    ArgumentError
        If the shapes do not match.

    Examples
    --------
    >>> H = parameter_sensitivity("exponential", np.array([[1.0, 0.1]]), np.arange(3.0), "log")
    >>> delta_covariance(H, 0.04 * np.eye(3))[0, 1, 1].round(6)
    np.float64(0.02)
    """
    number, count, leads = sensitivity.shape
    if covariance.shape not in ((leads, leads), (number, leads, leads)):
        raise ArgumentError(
            "covariance",
            expected=f"shape {(leads, leads)} or {(number, leads, leads)}",
            found=f"shape {covariance.shape}",
            remedy="give the covariance of ln E between the leads of the fit",
        )
    result = np.empty((number, count, count))
    for first in range(0, number, BLOCK):
        part = slice(first, first + BLOCK)
        given = covariance if covariance.ndim == 2 else covariance[part]
        result[part] = sensitivity[part] @ given @ np.swapaxes(sensitivity[part], 1, 2)
    return result


def time_gradient(law: Law | str, parameters: np.ndarray, size: np.ndarray | float) -> np.ndarray:
    """Derivatives of `Law.time_to` by the parameters, shape (N, P).

    From f(T) = size: dT/dtheta = -(df/dtheta)/(df/dt) at T. NaN where the size is not reached
    after the start.

    Examples
    --------
    >>> time_gradient("exponential", np.array([[0.5, 0.1]]), 1.0).round(4)
    array([[-20.    , -69.3147]])
    """
    record = find_law(law)
    table = np.atleast_2d(np.asarray(parameters, dtype=float))
    goal = np.broadcast_to(np.asarray(size, dtype=float), table.shape[:1])
    time = record.time_to(table, goal)
    inside = np.isfinite(time) & (time > 0)
    gradient = np.full(table.shape, np.nan)
    if inside.any():
        some = table[inside]
        with np.errstate(all="ignore"):
            # One lead of its own for each curve: a column of leads broadcasts along the curves.
            slope = record.jacobian(some, time[inside, None])[:, :, 0]
            speed = record.rate_at(some, goal[inside]) * goal[inside]
            gradient[inside] = -slope / speed[:, None]
        gradient[held_parameters(record, table)] = 0.0
        gradient[~inside] = np.nan
    return gradient


def doubling_error(law: Law | str, parameters: np.ndarray, covariance: np.ndarray) -> np.ndarray:
    """Standard error of `Law.doubling_time` by the delta method, shape (N,).

    ``covariance`` (N, P, P) as in `Fit`; parameters at a bound count as known. NaN where the
    error never doubles.

    Examples
    --------
    >>> covariance = np.diag([0.0, 1e-4])[None]
    >>> doubling_error("exponential", np.array([[1.0, 0.1]]), covariance).round(4)
    array([0.6931])
    """
    record = find_law(law)
    table = np.atleast_2d(np.asarray(parameters, dtype=float))
    if "growth_rate" in record.parameters:
        index = record.parameters.index("growth_rate")
        rate = table[:, index]
        with np.errstate(divide="ignore", invalid="ignore"):
            error = LN2 / rate**2 * np.sqrt(covariance[:, index, index])
            return np.asarray(np.where(rate > 0, error, np.nan))
    initial = record.initial_error(table)
    gradient = time_gradient(record, table, 2.0 * initial)
    # The goal 2 E0 moves with the initial error.
    with np.errstate(divide="ignore", invalid="ignore"):
        gradient[:, 0] += 2.0 / (record.rate_at(table, 2.0 * initial) * 2.0 * initial)
        variance = np.einsum("ni,nij,nj->n", gradient, _with_known(covariance), gradient)
        return np.asarray(np.sqrt(variance))


def growth_rate_error(law: Law | str, parameters: np.ndarray, covariance: np.ndarray) -> np.ndarray:
    """Standard error of `Law.growth_rate` (of a small error) by the delta method, shape (N,).

    Examples
    --------
    >>> growth_rate_error("exponential", np.array([[1.0, 0.1]]), np.diag([0.0, 1e-4])[None])
    array([0.01])
    """
    record = find_law(law)
    table = np.atleast_2d(np.asarray(parameters, dtype=float))
    if "growth_rate" in record.parameters:
        index = record.parameters.index("growth_rate")
        return np.asarray(np.sqrt(covariance[:, index, index]))
    initial, coefficient, power = table.T
    with np.errstate(divide="ignore", invalid="ignore"):
        rate = record.growth_rate(table)
        parts = [-power * rate / initial, rate / coefficient, -rate * np.log(initial)]
        gradient = np.stack(parts, axis=1)
        gradient[held_parameters(record, table)] = 0.0
        variance = np.einsum("ni,nij,nj->n", gradient, _with_known(covariance), gradient)
        return np.asarray(np.where(np.isfinite(rate), np.sqrt(variance), np.nan))


def _with_known(covariance: np.ndarray) -> np.ndarray:
    """Covariance in which a parameter at its bound (NaN) is known exactly."""
    known = np.nan_to_num(covariance, nan=0.0)
    known[np.isnan(covariance).all(axis=(1, 2))] = np.nan
    return np.asarray(known)
