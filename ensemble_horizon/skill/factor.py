"""Factor from spread to error: numpy kernels.

At each lead and place ``f^2 = mean(e^2) / mean((M + 1)/M s2)`` over starts. Its logarithm is
smoothed over leads by locally weighted straight lines, each lead weighing as many starts as it has;
what each start brings to the smoothed logarithm is a series whose mean's variance is told by
`ensemble_horizon.serial.mean_noise`, so that dependence between successive starts and between
neighbouring leads is in it.
"""

from __future__ import annotations

from typing import NamedTuple

import numpy as np

from ensemble_horizon.serial import LEAST_STARTS, Reason, mean_noise
from ensemble_horizon.skill.interval import STATISTICS, influence, square_reach
from ensemble_horizon.skill.smoothing import lead_smoother
from ensemble_horizon.spread.sampling import LeadNoise

# Places handled at once: starts x leads x places x 8 bytes, several times over.
_PLACES = 256


class Factor(NamedTuple):
    """Factors of L leads at K places, each (L, K) but for the last two.

    Parameters
    ----------
    log_square : ln(f^2); NaN where there is no error, no spread or no start
    log_variance : sampling variance of that
    low, high : ends of the interval of f
    dof : degrees of freedom of the variance
    starts : int, starts that have both spread and error
    reason : int8, see `ensemble_horizon.serial.Reason`
    correlation : (L, L) correlation of the noise of ln(f^2) between leads, over all places
    needed : (K,) starts for the relative uncertainty that was wanted, at every lead
    """

    log_square: np.ndarray
    log_variance: np.ndarray
    low: np.ndarray
    high: np.ndarray
    dof: np.ndarray
    starts: np.ndarray
    reason: np.ndarray
    correlation: np.ndarray
    needed: np.ndarray


def spread_factor(
    lead: np.ndarray,
    expected: np.ndarray,
    squared: np.ndarray,
    *,
    span: float = 0.3,
    wanted: float = 0.15,
    confidence: float = 0.9,
) -> Factor:
    """Factor from spread to error with its uncertainty.

    Parameters
    ----------
    lead : (L,) increasing
    expected, squared : (S, L, K) squared errors of the mean, expected of a consistent ensemble and
        found, in order of time; NaN where a start has none
    span : float, see `lead_smoother`
    wanted : float
        Relative standard error of the factor for which starts are counted.
    confidence : float

    Examples
    --------
    >>> rng = np.random.default_rng(0)
    >>> squared = 4 * rng.gamma(4, 1 / 4, (40, 5, 1))
    >>> found = spread_factor(np.arange(5.0), np.ones((40, 5, 1)), squared)
    >>> bool((abs(np.exp(found.log_square / 2) - 2) < 0.3).all())
    True
    """
    leads, places = expected.shape[1:]
    rows = {name: np.full((leads, places), np.nan) for name in Factor._fields[:5]}
    starts = np.zeros((leads, places), dtype=int)
    reason = np.full((leads, places), Reason.few_starts, dtype=np.int8)
    needed = np.full(places, np.nan)
    products = np.zeros((leads, leads))
    for first in range(0, places, _PLACES):
        piece = slice(first, first + _PLACES)
        block = _block(lead, expected[..., piece], squared[..., piece], span)
        rows["log_square"][:, piece] = block.log_square
        variance, dof, reason[:, piece] = _noise(block.series)
        rows["log_variance"][:, piece], rows["dof"][:, piece] = variance, dof
        starts[:, piece] = block.starts
        with np.errstate(invalid="ignore"):
            ends = square_reach(variance, dof, confidence)
        rows["low"][:, piece], rows["high"][:, piece] = np.exp((block.log_square + ends) / 2)
        needed[piece] = _needed(block, variance, wanted)
        products += _lead_products(block.series)
    scale = np.sqrt(np.maximum(np.diag(products), 1e-300))
    correlation = products / np.outer(scale, scale)
    np.fill_diagonal(correlation, 1.0)
    return Factor(**rows, starts=starts, reason=reason, correlation=correlation, needed=needed)


def calibrated_noise(
    noise: LeadNoise, log_variance: np.ndarray, correlation: np.ndarray
) -> LeadNoise:
    """Sampling noise of a spread after calibration: that of its members and that of the factor.

    Parameters
    ----------
    noise : LeadNoise of the spread
    log_variance : (L,) variance of ln(f^2)
    correlation : (L, L) of its noise between leads

    Returns
    -------
    LeadNoise with ``2/dof`` the sum of ``2/dof`` of the spread, the variance of the logarithm of
    its variance, and of that of the factor. The two are independent: members are few now, starts
    were few then.

    Examples
    --------
    >>> noise = LeadNoise(np.array([20.0]), np.eye(1))
    >>> calibrated_noise(noise, np.array([0.1]), np.eye(1)).dof.tolist()
    [10.0]
    """
    members, starts = np.sqrt(2 / noise.dof), np.sqrt(log_variance)
    total = noise.correlation * np.outer(members, members)
    total = total + correlation * np.outer(starts, starts)
    own = np.diag(total)
    return LeadNoise(2 / own, total / np.sqrt(np.outer(own, own)), noise.inflation)


class _Block(NamedTuple):
    log_square: np.ndarray  # (L, K) smoothed
    series: np.ndarray  # (S, L, K) what each start brings to it
    starts: np.ndarray  # (L, K)


def _block(lead: np.ndarray, expected: np.ndarray, squared: np.ndarray, span: float) -> _Block:
    inputs = np.stack([expected, squared]).astype(float)
    known = np.isfinite(inputs).all(axis=0)
    starts = known.sum(axis=0)
    with np.errstate(invalid="ignore", divide="ignore"):
        means = np.where(known, inputs, 0.0).sum(axis=1) / starts
        log_square = np.log(means[1] / means[0])
        # The ratio's scale is half the logarithm of expected over found.
        series = 2 * influence(STATISTICS["ratio"], inputs, means)
    usable = np.isfinite(log_square) & np.isfinite(series).any(axis=0)
    weight = np.where(usable, starts, 0)
    smoother = np.empty((lead.size, lead.size, starts.shape[1]))
    patterns, which = np.unique(weight, axis=1, return_inverse=True)
    for number, pattern in enumerate(patterns.T):
        smoother[..., which.ravel() == number] = lead_smoother(lead, pattern, span)[..., np.newaxis]
    # A start counts for more in the mean of a lead that other starts lack.
    brought = np.where(known & usable, series, 0.0) * (expected.shape[0] / np.maximum(starts, 1))
    smooth = np.einsum("lmk,mk->lk", smoother, np.where(usable, log_square, 0.0))
    single, series = series, np.einsum("lmk,smk->slk", smoother, brought)
    if span > 0:
        # The logarithm of a mean square with relative variance v lies v/2 below that of its
        # expectation. The smoothed one keeps all of that from single leads, but has a smaller v.
        lost = np.nan_to_num(_noise(single)[0]) / 2
        smooth += np.einsum("lmk,mk->lk", smoother, np.where(usable, lost, 0.0))
        smooth -= np.nan_to_num(_noise(series)[0]) / 2
    there = (known & usable).any(axis=1)
    return _Block(smooth, np.where(there[:, np.newaxis], series, np.nan), starts)


def _noise(series: np.ndarray) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Variance, degrees of freedom and reason (L, K) of the mean of what starts (S, L, K) bring."""
    # Beside 1, the size of what it is relative to, rounding is told from scatter.
    noise = mean_noise(series.reshape(series.shape[0], -1) + 1)
    shape = series.shape[1:]
    return noise.variance.reshape(shape), noise.dof.reshape(shape), noise.reason.reshape(shape)


def _needed(block: _Block, variance: np.ndarray, wanted: float) -> np.ndarray:
    """Starts (K,) at which the relative standard error of f is what was wanted, at every lead.

    Half of that of ln(f^2), it falls with the root of the starts. Where there are too few starts to
    tell how they depend on each other they are taken as independent: no fewer than that will do.
    """
    number = np.isfinite(block.series).sum(axis=0)
    with np.errstate(invalid="ignore", divide="ignore"):
        rough = np.nan_to_num(block.series).var(axis=0) / np.maximum(number - 1, 1)
        error = np.sqrt(np.where(np.isfinite(variance), variance, rough)) / 2
        wide = np.where(number > 1, number * (error / wanted) ** 2, np.nan)
    wide = np.where(np.isfinite(block.log_square), wide, np.nan)
    most = np.where(np.isfinite(wide), wide, 0.0).max(axis=0)
    found = np.maximum(np.ceil(most), LEAST_STARTS)
    return np.where(np.isfinite(wide).any(axis=0), found, np.nan)


def _lead_products(series: np.ndarray) -> np.ndarray:
    """Sum (L, L) over starts and places of what each start brings at two leads."""
    departure = np.where(np.isfinite(series), series, 0.0)
    return np.einsum("slk,smk->lm", departure, departure)
