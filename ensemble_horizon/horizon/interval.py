"""Intervals of a horizon from the sampling of members.

A crossing of the true curve at T lies inside the interval exactly if the true curve at T is inside
the band about the measured one, so the ends are the crossings of the measured curve moved up and
down. How far to move it is calibrated: where the noise of neighbouring leads is shared, by the
plain quantile of the chi-square distribution; where leads are noisy one by one, the first of many
noisy crossings comes early, and the two quantiles part accordingly. The band holds for Gaussian
members, with an allowance for heavier tails (see `ensemble_horizon.spread.sampling`).

For a curve E(t) with noise z(t) in standard units, crossing A at T, the measured curve moved by c
crosses by T if c >= c* = min over t <= T of max over the hold of (ln A - ln E(s))/sigma(s) - z(s);
the two moves are the quantiles of c* and of -c*.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy import special

from ensemble_horizon.horizon.crossing import Crossing, first_crossing
from ensemble_horizon.spread.sampling import LeadNoise, chi_square_quantile

_DRAWS = 2000
_TABLE_DRAWS = 1200
_SEED = 20  # fixed: the same input gives the same interval
_STEEPNESS = np.array([0.02, 0.05, 0.1, 0.2, 0.4, 0.8, 1.6, 3.2, 6.4])
_FAR = 8.0  # standard units from the threshold at which noise brings no crossing
_REACH = 16  # leads before the crossing whose noise can matter in a table


@dataclass(frozen=True)
class Moves:
    """How far a curve is moved for the low end (up) and the high end (down), in units of noise."""

    up: np.ndarray | float
    down: np.ndarray | float


def log_factor(dof: np.ndarray, z: np.ndarray | float) -> np.ndarray:
    """ln of the measured over the true spread at standard-normal noise ``z``.

    ``ln(chi2(Phi(z)) / dof) / 2`` with the chi-square quantile at ``dof`` degrees of freedom.
    """
    return np.asarray(0.5 * np.log(chi_square_quantile(special.ndtr(z), dof) / dof))


def plain_moves(confidence: float, inflation: float = 1.0) -> Moves:
    """Moves where the noise of all leads is one and the same."""
    quantile = inflation * float(special.ndtri(1 - (1 - confidence) / 2))
    return Moves(quantile, quantile)


def calibrated_moves(
    lead: np.ndarray,
    center: np.ndarray,
    threshold: float,
    noise: LeadNoise,
    confidence: float,
    *,
    hold: float = 0.0,
    threshold_pull: np.ndarray | None = None,
) -> Moves:
    """Moves for one curve.

    Parameters
    ----------
    lead : (L,)
    center : (L,) a smooth stand-in for the true curve, such as the fitted law
    threshold : float, in the units of the curve
    noise : LeadNoise
    confidence : float
    hold : float, in the units of ``lead``
    threshold_pull : (L,), optional
        Derivative of ln(threshold) with respect to ln(curve) at each lead, where the threshold is
        itself estimated from the curve (a fraction of its saturation).
    """
    there = np.isfinite(center)
    if not there.all():
        lead, center = lead[there], center[there]
        noise = _part_of(noise, there)
        threshold_pull = None if threshold_pull is None else threshold_pull[there]
    crossing = first_crossing(lead, center[:, np.newaxis], threshold, 0.0)
    moment = float(crossing.time[0])
    scale = np.sqrt(special.polygamma(1, noise.dof / 2) / 4)
    with np.errstate(divide="ignore", invalid="ignore"):
        distance = (np.log(threshold) - np.log(center)) / scale
    distance = np.nan_to_num(distance, nan=np.inf, posinf=np.inf)
    pull, chosen = None, slice(0, lead.size)
    if threshold_pull is not None:
        draws = _noise_draws(noise, _DRAWS)
        pull = _log_factors(noise.dof, draws) @ threshold_pull
    if not np.isfinite(moment):
        widen = 1.0 if pull is None else float(np.sqrt(1 + np.var(pull) / np.median(scale) ** 2))
        plain = plain_moves(confidence, noise.inflation)
        return Moves(plain.up * widen, plain.down * widen)
    if pull is None:
        chosen = _telling_leads(lead, distance, moment, hold)
        draws = _noise_draws(_part_of(noise, chosen), _DRAWS)
    scatter = -draws
    if pull is not None:
        scatter = scatter + pull[:, np.newaxis] / scale
    least = _least_move(lead[chosen], scatter, distance[chosen], moment, hold)
    return _quantiles(least * noise.inflation, confidence)


def _part_of(noise: LeadNoise, chosen: slice | np.ndarray) -> LeadNoise:
    return LeadNoise(noise.dof[chosen], noise.correlation[chosen][:, chosen], noise.inflation)


def _telling_leads(lead: np.ndarray, distance: np.ndarray, moment: float, hold: float) -> slice:
    """Leads whose noise can bring a crossing: near the threshold, up to the end of the hold."""
    after = int(np.searchsorted(lead, moment))
    near = np.flatnonzero(distance[:after] < _FAR)
    first = min(int(near[0]) if near.size else after - 1, after - 1)
    return slice(first, max(int(np.searchsorted(lead, moment + hold, side="right")), after) + 1)


def _least_move(
    lead: np.ndarray, scatter: np.ndarray, distance: np.ndarray, moment: float, hold: float
) -> np.ndarray:
    """c* (D,) from the distance of each lead (L,) to the threshold and its scatter (D, L).

    The crossing itself lies between two leads, at no distance.
    """
    after = int(np.searchsorted(lead, moment))
    share = (moment - lead[after - 1]) / (lead[after] - lead[after - 1])
    at_crossing = (1 - share) * scatter[:, after - 1] + share * scatter[:, after]
    need = np.insert(distance + scatter, after, at_crossing, axis=1)
    moments = np.insert(lead, after, moment)
    if hold > 0:
        windows = [(moments >= t) & (moments <= t + hold) for t in moments[: after + 1]]
        return np.stack([need[:, window].max(axis=1) for window in windows]).min(axis=0)
    return np.asarray(need[:, : after + 1].min(axis=1))


def _quantiles(least: np.ndarray, confidence: float) -> Moves:
    tail = (1 - confidence) / 2
    low, high = np.quantile(least, [tail, 1 - tail])
    return Moves(max(float(high), 0.0), max(float(-low), 0.0))


def _noise_draws(noise: LeadNoise, number: int) -> np.ndarray:
    values, vectors = np.linalg.eigh(noise.correlation)
    root = vectors * np.sqrt(np.maximum(values, 0.0))
    half = np.random.default_rng(_SEED).standard_normal((number // 2, noise.dof.size))
    return np.asarray(np.concatenate([half, -half]) @ root.T)


@dataclass(frozen=True)
class MoveTable:
    """Moves by the lead before the crossing and by steepness, for many curves with one noise.

    Steepness is the growth of ln(spread) over one lead step, in standard units of its noise.
    """

    up: np.ndarray  # (L, K)
    down: np.ndarray  # (L, K)

    def look_up(self, before: np.ndarray, steepness: np.ndarray) -> Moves:
        """Moves (N,) for curves that cross after lead ``before``, linear in log steepness."""
        position = np.interp(
            np.log(np.clip(steepness, _STEEPNESS[0], _STEEPNESS[-1])),
            np.log(_STEEPNESS),
            np.arange(_STEEPNESS.size),
        )
        left = np.minimum(position.astype(int), _STEEPNESS.size - 2)
        share = position - left
        row = np.clip(before, 0, self.up.shape[0] - 1)
        up, down = (
            table[row, left] * (1 - share) + table[row, left + 1] * share
            for table in (self.up, self.down)
        )
        return Moves(up, down)


def move_table(
    lead: np.ndarray, noise: LeadNoise, confidence: float, *, hold: float = 0.0
) -> MoveTable:
    """Tabulate moves for curves that grow at a steady rate about their crossing.

    The crossing is taken midway between two leads; leads may be unevenly spaced.
    """
    size = lead.size
    if size < 2:
        plain = plain_moves(confidence, noise.inflation)
        shape = (size, _STEEPNESS.size)
        return MoveTable(np.full(shape, plain.up), np.full(shape, plain.down))
    draws = _noise_draws(noise, _TABLE_DRAWS)
    up = np.empty((size, _STEEPNESS.size))
    down = np.empty_like(up)
    for before in range(size):
        step = float(lead[min(before + 1, size - 1)] - lead[min(before, size - 2)])
        crossing = float(lead[before]) + step / 2
        last = int(np.searchsorted(lead, crossing + hold, side="right"))
        chosen = np.arange(max(0, before - _REACH), max(last, before + 1))
        moments = np.append(lead[chosen] - crossing, 0.0)
        middle = 0.5 * (draws[:, before] + draws[:, min(before + 1, size - 1)])
        local = np.column_stack([draws[:, chosen], middle])
        order = np.argsort(moments, kind="stable")
        moments, local = moments[order], local[:, order]
        for column, steepness in enumerate(_STEEPNESS):
            need = -moments / step * steepness - local
            least = _least_of_windows(need, moments, hold) * noise.inflation
            moves = _quantiles(least, confidence)
            up[before, column], down[before, column] = moves.up, moves.down
    return MoveTable(up, down)


def _least_of_windows(need: np.ndarray, moments: np.ndarray, hold: float) -> np.ndarray:
    starts = np.flatnonzero(moments <= 0)
    if hold <= 0:
        return np.asarray(need[:, starts].min(axis=1))
    windows = [(moments >= moments[i]) & (moments <= moments[i] + hold) for i in starts]
    return np.stack([need[:, window].max(axis=1) for window in windows]).min(axis=0)


def spread_bounds(
    lead: np.ndarray,
    curves: np.ndarray,
    threshold: np.ndarray | float,
    dof: np.ndarray,
    moves: Moves,
    hold: float = 0.0,
) -> tuple[np.ndarray, np.ndarray]:
    """Low and high end (N,) of the horizons of N curves (L, N).

    The low end is zero where the curve moved up exceeds the threshold from the first lead on. An
    end is infinite where the moved curve does not cross within the run: it lies beyond the run.
    Both are NaN where a curve has no threshold.
    """
    number = curves.shape[1]
    level = np.broadcast_to(np.asarray(threshold, dtype=float), (number,))
    up = first_crossing(lead, _moved(curves, dof, -np.asarray(moves.up)), level, hold)
    lowered = _moved(curves, dof, np.asarray(moves.down))
    # Between two leads a growing error runs below the straight line: the later placing, here.
    down = first_crossing(lead, lowered, level, hold, geometric=True)
    return _ends(up, down, np.isfinite(level) & (up.points > 0))


def _moved(curves: np.ndarray, dof: np.ndarray, z: np.ndarray) -> np.ndarray:
    """Curves (L, N) freed of noise of ``z`` standard units, a scalar or (N,)."""
    if z.ndim == 0:
        return curves * np.exp(-log_factor(dof, float(z)))[:, np.newaxis]
    return curves * np.exp(-_log_factors(dof, np.broadcast_to(z, (dof.size, z.size)).T).T)


def _log_factors(dof: np.ndarray, z: np.ndarray) -> np.ndarray:
    """`log_factor` for many draws (D, L), from a table: the chi-square quantile is slow."""
    grid = np.linspace(-6.0, 6.0, 121)
    tables: dict[float, np.ndarray] = {}
    found = np.empty(z.shape)
    for lead, degrees in enumerate(dof):
        table = tables.setdefault(float(degrees), log_factor(degrees, grid))
        found[:, lead] = np.interp(z[:, lead], grid, table)
    return found


def share_bounds(
    lead: np.ndarray,
    shares: np.ndarray,
    number: np.ndarray | float,
    probability: float,
    confidence: float,
    hold: float = 0.0,
) -> tuple[np.ndarray, np.ndarray]:
    """Low and high end (N,) of chance horizons, from Jeffreys' binomial interval at each lead.

    Parameters
    ----------
    shares : (L, N) share of members beyond the distance
    number : scalar or (L, N)
        Members, or the number of independent ones that the share is worth.

    Notes
    -----
    Jeffreys' interval: quantiles of Beta(k + 1/2, n - k + 1/2) (Brown, Cai and DasGupta 2001,
    Statistical Science, from memory). Shares of few members move in steps, so the interval covers
    at least what it says rather than just that.
    """
    tail = (1 - confidence) / 2
    low, high = share_band(shares, number, tail)
    up = first_crossing(lead, high, probability, hold)
    down = first_crossing(lead, low, probability, hold)
    return _ends(up, down, up.points > 0)


def share_band(
    shares: np.ndarray, number: np.ndarray | float, tail: float
) -> tuple[np.ndarray, np.ndarray]:
    """Jeffreys' interval of shares, with tail probability ``tail`` on either side."""
    if np.ndim(number) == 0:
        known, place = np.unique(shares, return_inverse=True)
        low, high = _jeffreys(known, float(number), tail)
        return low[place].reshape(shares.shape), high[place].reshape(shares.shape)
    return _jeffreys(shares, np.asarray(number, dtype=float), tail)


def _jeffreys(
    shares: np.ndarray, number: np.ndarray | float, tail: float
) -> tuple[np.ndarray, np.ndarray]:
    count = shares * number
    low = special.betaincinv(count + 0.5, number - count + 0.5, tail)
    high = special.betaincinv(count + 0.5, number - count + 0.5, 1 - tail)
    return np.where(shares > 0, low, shares), np.where(shares < 1, high, shares)


def _ends(up: Crossing, down: Crossing, known: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    low = np.where(up.at_start, 0.0, np.where(np.isfinite(up.time), up.time, np.inf))
    high = np.where(down.at_start, down.first, np.where(np.isfinite(down.time), down.time, np.inf))
    return np.where(known, low, np.nan), np.where(known, high, np.nan)
