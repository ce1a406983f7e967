"""Mean and interval of growth rates measured over blocks of time along independent runs."""

from __future__ import annotations

from typing import NamedTuple

import numpy as np
from scipy import special

from ensemble_horizon.errors import ArgumentError
from ensemble_horizon.toys.norms import Array

# As many independent runs as this are taken whole, which needs nothing known of their memory.
ENOUGH = 10
# With fewer runs, blocks of time are merged until there are fewer than this in all; more would
# hardly lower Student's t.
BLOCKS = 64
# Blocks must be worth as many independent ones as this, or their correlation cannot be told.
FEWEST = 12
# Chance of a false alarm of the test for falling rates, over all exponents.
ALARM = 0.01


class Measured(NamedTuple):
    """Mean (k,), covariance (k, k) of its sampling error, and Student's t to multiply that by.

    ``allowance`` (k,) is what comes to the half-width of the interval beside the sampling error.
    """

    mean: Array
    covariance: Array
    quantile: float
    allowance: Array

    @property
    def half_width(self) -> Array:
        """Half-width (k,) of the interval."""
        return self.quantile * np.sqrt(np.diagonal(self.covariance)) + self.allowance


def measure(
    rates: Array, edges: Array, confidence: float, systematic: Array, *, in_step: bool = False
) -> Measured:
    """Return mean and interval of ``rates`` (M, B, k): M runs, B blocks (even), k exponents.

    The interval is Student's t over runs where there are at least 10: runs are independent, and
    their means are taken to be normal. With fewer, blocks of time are the samples, fewer than 64
    in all, and count for n (1 - r) / (1 + r) if neighbours have the correlation r > 0, as though
    the memory of the rates were exponential. ``systematic`` (k,) is added on both sides.

    Runs that may be ``in_step``, as they began together, are worth one run between them: the
    interval is then that of a single one.

    Growth slower than exponential, by a power of time, has a rate that falls like 1/t. Where the
    rates are found to change like that, the interval is widened by half as much again as the way
    from the mean to the limit extrapolated in 1/t.

    Parameters
    ----------
    edges : array (B + 1,)
        Times at which blocks begin and end, counted from the first displacements, above zero.

    Raises
    ------
    ArgumentError
        If blocks of too few runs are worth less than 12 independent ones.
    """
    falling = np.log(edges[1:] / edges[:-1]) / np.diff(edges)
    trend, limit = _trend(rates, falling)
    mean = rates.mean(axis=(0, 1))
    samples, worth = _samples(rates, falling, trend, systematic)
    spread = np.sqrt(len(samples) * (len(rates) if in_step else 1) / worth)
    covariance = np.cov(samples, rowvar=False).reshape(mean.size, mean.size) / len(samples)
    covariance *= np.outer(spread, spread)
    quantile = float(special.stdtrit(worth.min() - 1.0, 0.5 * (1.0 + confidence)))
    alarm = float(special.stdtrit(trend.degrees, 1.0 - 0.5 * ALARM / mean.size))
    moved = np.abs(mean - limit.value)
    changing = (np.abs(trend.value) > alarm * trend.error) & (moved > systematic)
    unsettled = np.where(changing, 1.5 * moved + quantile * limit.error, 0.0)
    return Measured(mean, covariance, quantile, systematic + unsettled)


class _Fitted(NamedTuple):
    """A coefficient (k,), its standard error and their degrees of freedom."""

    value: Array
    error: Array
    degrees: int


def _trend(rates: Array, falling: Array) -> tuple[_Fitted, _Fitted]:
    """Fit rates = limit + trend * falling; return trend and limit, each (k,).

    From the two halves of the time only: single blocks swing with the phase of a cycle.
    """
    members, blocks, _ = rates.shape
    half = np.repeat([2.0 / blocks, -2.0 / blocks], blocks // 2)
    weight = half / (half @ falling)
    slopes = np.einsum("b,mbk->mk", weight, rates)
    limits = rates.mean(axis=1) - slopes * falling.mean()
    if members >= ENOUGH:
        degrees = members - 1
        errors = [np.std(x, axis=0, ddof=1) / np.sqrt(members) for x in (slopes, limits)]
    else:
        degrees = members * blocks - 2
        rest = rates - limits.mean(axis=0) - slopes.mean(axis=0) * falling[:, None]
        noise = np.sqrt(np.sum(rest**2, axis=(0, 1)) / degrees / members)
        scale = np.sqrt(np.sum(weight**2))
        errors = [noise * scale, noise * np.hypot(1 / np.sqrt(blocks), scale * falling.mean())]
    return (
        _Fitted(slopes.mean(axis=0), errors[0], degrees),
        _Fitted(limits.mean(axis=0), errors[1], degrees),
    )


def _samples(
    rates: Array, falling: Array, trend: _Fitted, systematic: Array
) -> tuple[Array, Array]:
    """Return samples (S, k) of the rates, and how many independent ones (k,) they are worth."""
    members, _, count = rates.shape
    if members >= ENOUGH:
        return rates.mean(axis=1), np.full(count, float(members))
    rest = rates - trend.value * (falling - falling.mean())[:, None]
    while members * rest.shape[1] >= BLOCKS:
        rest = 0.5 * (rest[:, ::2] + rest[:, 1::2])
    blocks = members * rest.shape[1]
    correlation = _correlation(rest, systematic)
    worth = blocks * (1.0 - correlation) / (1.0 + correlation)
    # Over all exponents, as that of one of many is large by chance.
    found = blocks * (1.0 - correlation.mean()) / (1.0 + correlation.mean())
    if found < FEWEST:
        raise ArgumentError(
            "length",
            expected="blocks of time that are long against the memory of the growth rates",
            found=f"{blocks} blocks worth {found:.1f} independent ones, {FEWEST} needed",
            remedy=f"take a greater length, or at least {ENOUGH} members",
        )
    return rest.reshape(-1, count), worth


def _correlation(rates: Array, systematic: Array) -> Array:
    """Return the correlation (k,) of neighbouring blocks, zero if it is below."""
    about = rates - rates.mean(axis=(0, 1))
    total = about[..., 0].size
    power = np.mean(about**2, axis=(0, 1))
    # Fluctuations below the systematic error are rounding, and of no account.
    alive = np.sqrt(power) > systematic
    pairs = np.mean(about[:, 1:] * about[:, :-1], axis=(0, 1))
    raw = pairs / np.where(alive, power, 1.0)
    # Taken about its own mean a series looks less correlated than it is, by (1 + 3 r) / n
    # (Kendall 1954, Biometrika 41, from memory).
    return np.where(alive, np.clip((total * raw + 1.0) / (total - 3.0), 0.0, 0.8), 0.0)
