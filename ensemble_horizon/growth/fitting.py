"""Fit one law to many curves: batches, starts, descent, covariance.

One curve or 300 000, the work per curve is the same few microseconds: curves run through the
descent in batches that stay in the processor's cache; the few that take long are pooled and run
again, so that they never hold up a batch.
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from enum import IntEnum

import numpy as np

from ensemble_horizon.checks import require_choice
from ensemble_horizon.errors import ArgumentError
from ensemble_horizon.growth.akaike import corrected_akaike
from ensemble_horizon.growth.batches import BATCH, Batch, Curves, checked_weights
from ensemble_horizon.growth.clock import Clock
from ensemble_horizon.growth.descent import (
    Descent,
    descend,
    factorise,
    normal_equations,
    solve,
    unit_scale,
)
from ensemble_horizon.growth.law import Law
from ensemble_horizon.growth.laws import find_law

SCALES = ("linear", "log")
PASSES = (8, 40, 400)
TOLERANCE = 1e-10
STALLED_GROWTH = 1e-3
GRAIN = 1e-10


class Reason(IntEnum):
    """Why a curve has the fit it has."""

    fitted = 0
    too_few_points = 1
    constant = 2
    no_growth = 3
    not_converged = 4


@dataclass(frozen=True)
class Fit:
    """Fits of one law to N curves; plain arrays, so it can be sent between processes.

    Attributes
    ----------
    law : str
        Name of the law.
    scale : str
        "linear" or "log".
    parameters : array (N, P)
        Fitted parameters, NaN where there is no fit.
    covariance : array (N, P, P)
        s^2 (J'J)^-1 in those parameters, s^2 = RSS/(points - P). Rows and columns of a parameter
        that ended at its bound are NaN, and the others are conditional on that bound.
    rss, total : array (N,)
        Residual sum of squares, and sum of squares about the mean, both on the fitted scale.
    points : int array (N,)
        Points used.
    converged : bool array (N,)
    aicc : array (N,)
        Corrected Akaike criterion, NaN where there is no fit.
    reason : int8 array (N,)
        A `Reason` for each curve.
    """

    law: str
    scale: str
    parameters: np.ndarray
    covariance: np.ndarray
    rss: np.ndarray
    total: np.ndarray
    points: np.ndarray
    converged: np.ndarray
    aicc: np.ndarray
    reason: np.ndarray

    @property
    def standard_errors(self) -> np.ndarray:
        """Roots of the diagonal of the covariance, shape (N, P)."""
        with np.errstate(invalid="ignore"):
            return np.asarray(np.sqrt(np.diagonal(self.covariance, axis1=1, axis2=2)))


def fit_curves(
    lead: np.ndarray,
    curves: np.ndarray,
    law: Law | str,
    scale: str = "linear",
    weights: np.ndarray | None = None,
    tolerance: float = TOLERANCE,
) -> Fit:
    """Least-squares fits of ``law`` to curves.

    Parameters
    ----------
    lead : array (L,)
        Increasing lead times of at least zero.
    curves : array (N, L)
        Error sizes; NaN (and, for ``scale="log"``, sizes of zero or less) are left out.
    law : Law or str
        A law or its name.
    scale : {"linear", "log"}
        Residual y - f, or ln y - ln f.
    weights : array (L,) or (N, L), optional
        Weights of the squared residuals, at least zero; a lead of weight zero is left out.
    tolerance : float
        A fit ends when the next step promises a smaller relative fall of the RSS.

    Returns
    -------
    Fit
        Never an error for what the curves hold: a curve that cannot be fitted has NaN parameters
        and a `Reason`. That is so for fewer than P + 2 usable points, for curves that do not vary
        at all, and, except for the exponential law, for curves that do not grow.

    Raises
    ------
    ArgumentError
        For an unknown law or scale, leads that do not increase, or shapes that do not match.

    Examples
    --------
    >>> lead = np.arange(0.0, 60.0, 6.0)
    >>> fit = fit_curves(lead, 0.1 * np.exp(0.05 * lead)[None], "exponential")
    >>> fit.parameters.round(6)
    array([[0.1 , 0.05]])
    """
    record = find_law(law)
    require_choice(scale, SCALES, "scale")
    clock = Clock(lead)
    table = np.asarray(curves)
    if table.ndim != 2 or table.shape[1] != clock.time.size:
        raise ArgumentError(
            "curves",
            expected=f"an array (N, {clock.time.size})",
            found=f"shape {table.shape}",
            remedy="put one curve in each row, with one value per lead",
        )
    data = Curves.survey(table, checked_weights(weights, table.shape), scale == "log")
    fit = _empty(record, scale, data.points)
    enough = data.points >= len(record.parameters) + 2
    fit.reason[~enough] = Reason.too_few_points
    fit.reason[enough & ~data.varied] = Reason.constant
    _run_passes(_Job(record, clock, data, tolerance), fit, np.flatnonzero(enough & data.varied))
    rss = _resolved(fit.rss, data)
    return replace(fit, aicc=corrected_akaike(rss, data.points, len(record.parameters)))


@dataclass(frozen=True)
class _Job:
    law: Law
    clock: Clock
    data: Curves
    tolerance: float


def _run_passes(job: _Job, fit: Fit, chosen: np.ndarray) -> None:
    known: np.ndarray | None = None
    for number, iterations in enumerate(PASSES):
        late_rows, late_theta = [], []
        for first in range(0, chosen.size, BATCH):
            rows = chosen[first : first + BATCH]
            batch = job.data.batch(rows)
            here = slice(first, first + BATCH)
            theta = _best_start(job, batch) if known is None else known[:, here]
            last = number == len(PASSES) - 1
            end = descend(job.law.form, job.clock, batch, theta, job.tolerance, iterations, last)
            late = ~end.finished & np.isfinite(end.rss)
            keep = np.ones(rows.size, dtype=bool) if last else ~late
            _store(job, fit, rows, batch, end, keep)
            late_rows.append(rows[~keep])
            late_theta.append(end.theta[:, ~keep])
        chosen = np.concatenate(late_rows) if late_rows else chosen[:0]
        if chosen.size == 0:
            return
        known = np.concatenate(late_theta, axis=1)


def _best_start(job: _Job, batch: Batch) -> np.ndarray:
    form = job.law.form
    starts = form.starts(job.clock, batch.curve, batch.weight, batch.log)
    if len(starts) == 1:
        return starts[0]
    misfits = np.stack([normal_equations(form, job.clock, batch, start).rss for start in starts])
    best = misfits.argmin(axis=0)
    return np.asarray(np.take_along_axis(np.stack(starts), best[None, None], axis=0)[0])


def _store(
    job: _Job, fit: Fit, rows: np.ndarray, batch: Batch, end: Descent, keep: np.ndarray
) -> None:
    rows = rows[keep]
    if rows.size == 0:
        return
    theta, normal, finished = end.theta[:, keep], end.normal[:, :, keep], end.finished[keep]
    scale = job.data.high[rows]
    square = np.ones_like(scale) if job.data.log else scale**2
    count = len(job.law.parameters)
    lower, upper = (np.array(bound)[:, None] for bound in (job.law.form.lower, job.law.form.upper))
    with np.errstate(all="ignore"):
        natural, slope, held = job.law.form.natural(theta, scale, job.clock.span)
        noise = end.rss[keep] / (fit.points[rows] - count)
        covariance = _covariance(slope, normal, (theta > lower) & (theta < upper)) * noise
        if held.any():
            covariance[held[:, None] | held[None]] = np.nan
        ends = job.law.value(natural.T, job.clock.time[[0, -1], 0] * job.clock.span)
        growth = ends[:, 1] / ends[:, 0] - 1.0
    good = finished & np.isfinite(end.rss[keep])
    reason = np.where(good, Reason.fitted, Reason.not_converged).astype(np.int8)
    # A descent that cannot fall runs into E0 = Es, where there is no minimum to finish in.
    flat = growth <= np.where(good, job.law.least_growth, STALLED_GROWTH)
    reason[flat] = Reason.no_growth
    if not job.law.may_fall:
        good &= ~flat
    fit.parameters[rows] = np.where(good[:, None], natural.T, np.nan)
    fit.covariance[rows] = np.moveaxis(np.where(good, covariance, np.nan), -1, 0)
    fit.rss[rows] = np.where(good, end.rss[keep] * square, np.nan)
    fit.total[rows] = batch.total()[keep] * square
    fit.converged[rows] = good
    fit.reason[rows] = reason


def _covariance(slope: np.ndarray, normal: np.ndarray, free: np.ndarray) -> np.ndarray:
    """D (J'J)^-1 D' over the free parameters, arrays (P, P, n)."""
    matrix, scale = unit_scale(normal, free)
    size = scale.shape[0]
    for i in range(size):
        matrix[i, i] = 1.0
    factor = factorise(matrix)
    slope = slope * scale
    right = np.stack([solve(factor, slope[i]) for i in range(size)])
    covariance = np.empty_like(normal)
    for i in range(size):
        for j in range(i + 1):
            np.einsum("pn,pn->n", slope[i], right[j], out=covariance[i, j])
            covariance[j, i] = covariance[i, j]
    return covariance


def _resolved(rss: np.ndarray, data: Curves) -> np.ndarray:
    """RSS no smaller than rounding makes it, so that exact curves do not choose laws by noise."""
    grain = GRAIN * (1.0 if data.log else np.maximum(data.high, 0.0))
    return np.maximum(rss, data.points * grain**2)


def _empty(law: Law, scale: str, points: np.ndarray) -> Fit:
    number, count = points.size, len(law.parameters)
    return Fit(
        law=law.name,
        scale=scale,
        parameters=np.full((number, count), np.nan),
        covariance=np.full((number, count, count), np.nan),
        rss=np.full(number, np.nan),
        total=np.full(number, np.nan),
        points=points,
        converged=np.zeros(number, dtype=bool),
        aicc=np.full(number, np.nan),
        reason=np.zeros(number, dtype=np.int8),
    )
