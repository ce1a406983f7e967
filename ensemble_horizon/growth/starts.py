"""First guesses for the fits, from linear regressions over a grid of the one nonlinear parameter.

Arrays are lead-major: curves (L, n), scaled to a largest value of one, zero where ``weight`` is
zero. Every sum over leads with a known weight is one matrix product. A residual of a transformed
size is brought back to one of the size itself (or of its logarithm) by its first derivative.
"""

from __future__ import annotations

import numpy as np

from ensemble_horizon.growth.clock import Clock

TINY = 1e-12
LEAST_SIZE = 1e-4


def line_of_logarithm(
    clock: Clock, curve: np.ndarray, weight: np.ndarray | None, log: bool
) -> np.ndarray:
    """Straight line through ln E, weighted by E^2 unless ``log``: (a, b), shape (2, n)."""
    time = clock.time
    if log:
        worth = np.ones_like(curve) if weight is None else weight.copy()
    else:
        worth = curve * curve if weight is None else weight * curve * curve
    # Sizes at or below zero have no logarithm, and next to no say in the linear residual either.
    logarithm = np.log(np.maximum(curve, LEAST_SIZE if not log else 1e-300))
    moments = np.concatenate([np.ones_like(time), time, time * time], axis=1).T
    s0, s1, s2 = moments @ worth
    worth *= logarithm
    y0, y1 = moments[:2] @ worth
    spread = s0 * s2 - s1 * s1
    slope = np.where(spread > TINY * s0 * s2, (s0 * y1 - s1 * y0) / spread, 0.0)
    return np.stack([(y0 - slope * s1) / np.maximum(s0, TINY), slope])


def scan_logistic(
    clock: Clock, curve: np.ndarray, weight: np.ndarray | None, log: bool
) -> np.ndarray:
    """Logistic law by 1/E = u + v exp(-k t), linear once k is given: (u, ln v, k), shape (3, n)."""
    # Single precision halves the cost, and is plenty for a guess.
    rates = _rates(clock)
    fall = np.exp(-rates * clock.time.T)
    ones = np.ones((1, fall.shape[1]))
    powers = _powers(curve.astype(np.float32), weight, log)
    sums = np.concatenate([ones, fall, fall * fall]).astype(np.float32) @ powers[0]
    s0, s1, s2 = sums[0], sums[1 : rates.size + 1], sums[rates.size + 1 :]
    sums = np.concatenate([ones, fall]).astype(np.float32) @ powers[1]
    y0, y1 = sums[0], sums[1:]
    yy = powers[2].sum(axis=0)
    with np.errstate(all="ignore"):
        slope = (s0 * y1 - s1 * y0) / (s0 * s2 - s1 * s1)
        level = (y0 - slope * s1) / s0
        below = level < 0
        if below.any():
            level = np.where(below, 0.0, level)
            slope = np.where(below, y1 / s2, slope)
        misfit = yy - level * y0
        misfit -= slope * y1
        misfit[~((slope > TINY) & np.isfinite(misfit))] = np.inf
        best = misfit.argmin(axis=0)
        column = np.arange(best.size)
        offset = _vertex(misfit, best, column)
        depth = np.log(slope)
        depth[~(slope > TINY)] = 0.0
    guess = np.stack(
        [
            np.maximum(_between(level, best, offset, column), 0.0),
            _between(depth, best, offset, column),
            np.exp(_between(np.log(rates), best, offset, column)),
        ]
    ).astype(float)
    lost = ~np.isfinite(misfit[best, column])
    if lost.any():
        guess[:, lost] = np.array([[1.0], [-2.0], [1.0]])
    return guess


def scan_source(
    clock: Clock, curve: np.ndarray, weight: np.ndarray | None, log: bool
) -> np.ndarray:
    """Logistic law with a source: (E0, a, S, u), shape (4, n).

    With z = exp(-k t) and w = (1 - z)/k the law reads V z = V0 z + R w - (u R) V w, linear in
    (V0, R, u R) once k is given.
    """
    rates = _rates(clock, count=12)
    fall = np.exp(-rates * clock.time.T)
    drop = (1.0 - fall) / rates
    variance = curve * curve
    worth = 1.0 / np.maximum(variance, LEAST_SIZE)
    if log:
        worth *= worth
    if weight is not None:
        worth *= weight
    bases = np.concatenate([fall * fall, fall * drop, drop * drop])
    zero = np.split(bases @ worth, 3)
    worth *= variance
    one = np.split(bases @ worth, 3)
    worth *= variance
    two = np.split(bases @ worth, 3)
    matrix = [[zero[0], zero[1], -one[1]], [zero[1], zero[2], -one[2]], [-one[1], -one[2], two[2]]]
    start, ramp, damped = _solve_three(matrix, [one[0], one[1], -two[1]])
    misfit = two[0] - start * one[0] - ramp * one[1] + damped * two[1]
    with np.errstate(divide="ignore", invalid="ignore"):
        start = np.clip(start, 0.0, 0.98)
        level = np.clip(damped / ramp, 0.0, 0.98 / np.maximum(start, 0.5))
        rate = rates
        feed = (rate - level * ramp) / (1.0 - level * start)
        source = (ramp - rate * start) / (1.0 - level * start)
    good = np.isfinite(misfit) & (ramp > 0) & np.isfinite(feed + source)
    misfit = np.where(good, np.abs(misfit), np.inf)
    best = misfit.argmin(axis=0)
    column = np.arange(best.size)
    guess = np.stack([part[best, column] for part in (np.sqrt(start), feed, source, level)])
    guess[0] = np.maximum(guess[0], 1e-2)
    guess[1:3] = np.maximum(guess[1:3], 1e-2)
    lost = ~np.isfinite(misfit[best, column])
    if lost.any():
        guess[:, lost] = np.array([[0.3], [1.0], [0.5], [0.9]])
    return guess


def scan_power(clock: Clock, curve: np.ndarray, weight: np.ndarray | None, log: bool) -> np.ndarray:
    """Power law by E^p linear in t once p is given: (b, w, g), shape (3, n).

    p runs over 1, 1/2, 1/4, 1/8, which need square roots only.
    """
    time = clock.time
    moments = np.concatenate([np.ones_like(time), time, time * time], axis=1).T
    raised = np.maximum(curve, LEAST_SIZE)
    size = raised
    least: np.ndarray | None = None
    guess = np.zeros((3, curve.shape[1]))
    for power in (1.0, 0.5, 0.25, 0.125):
        worth = 1.0 / (raised * raised)
        if not log:
            worth *= size * size
        if weight is not None:
            worth *= weight
        s0, s1, s2 = moments @ worth
        worth *= raised
        y0, y1 = moments[:2] @ worth
        worth *= raised
        slope = np.maximum((s0 * y1 - s1 * y0) / (s0 * s2 - s1 * s1), LEAST_SIZE)
        level = np.clip((y0 - slope * s1) / s0, 0.0, None)
        misfit = worth.sum(axis=0) - 2.0 * (level * y0 + slope * y1)
        misfit += level * level * s0 + 2.0 * level * slope * s1 + slope * slope * s2
        misfit /= power**2
        end = level + slope
        # Not at the bound 1, where the first lead no longer pulls.
        share = np.clip(slope / end, 1e-3, 0.97)
        current = np.stack([np.log(end) / power, share, share * (1.0 / power - 1.0)])
        if least is None:
            least, guess = misfit, current
        else:
            better = misfit < least
            guess = np.where(better, current, guess)
            least = np.where(better, misfit, least)
        raised = np.sqrt(raised)
    return guess


def _rates(clock: Clock, count: int = 16) -> np.ndarray:
    fastest = 3.0 * max(clock.time.size, 4)
    return np.geomspace(0.4, fastest, count)[:, None]


def _powers(
    curve: np.ndarray, weight: np.ndarray | None, log: bool
) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Weights of 1, 1/E and 1/E^2 in a regression of 1/E that minimises the misfit of E (ln E)."""
    square = curve * curve
    if log:
        last = np.ones_like(curve) if weight is None else weight.astype(curve.dtype)
        return square * last, curve * last, last
    if weight is None:
        return square * square, square * curve, square
    last = square * weight.astype(curve.dtype)
    return square * last, curve * last, last


def _vertex(misfit: np.ndarray, best: np.ndarray, column: np.ndarray) -> np.ndarray:
    """Offset, in grid steps within -1/2 to 1/2, of the lowest point of a parabola through three."""
    inner = np.clip(best, 1, misfit.shape[0] - 2)
    left, middle, right = (misfit[inner + step, column] for step in (-1, 0, 1))
    with np.errstate(divide="ignore", invalid="ignore"):
        offset = 0.5 * (left - right) / (left - 2.0 * middle + right)
    usable = (inner == best) & np.isfinite(offset)
    return np.where(usable, np.clip(offset, -0.5, 0.5), 0.0)


def _between(
    grid: np.ndarray, best: np.ndarray, offset: np.ndarray, column: np.ndarray
) -> np.ndarray:
    """Linear interpolation between grid row ``best`` and its neighbour towards ``offset``."""
    other = np.clip(best + np.where(offset < 0, -1, 1), 0, grid.shape[0] - 1)
    if grid.shape[1] == 1:
        column = np.zeros_like(column)
    share = np.abs(offset)
    return np.asarray((1.0 - share) * grid[best, column] + share * grid[other, column])


def _solve_three(matrix: list[list[np.ndarray]], right: list[np.ndarray]) -> list[np.ndarray]:
    """Symmetric 3 x 3 systems by cofactors, elementwise over arrays of any shape."""
    (a, b, c), (_, d, e), (_, _, f) = matrix
    x, y, z = right
    m00, m01, m02 = d * f - e * e, c * e - b * f, b * e - c * d
    m11, m12, m22 = a * f - c * c, b * c - a * e, a * d - b * b
    with np.errstate(divide="ignore", invalid="ignore"):
        inverse = 1.0 / (a * m00 + b * m01 + c * m02)
        return [
            (m00 * x + m01 * y + m02 * z) * inverse,
            (m01 * x + m11 * y + m12 * z) * inverse,
            (m02 * x + m12 * y + m22 * z) * inverse,
        ]
