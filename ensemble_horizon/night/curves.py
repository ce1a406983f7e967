"""From the summary of a start to the curves of its places, and to curves pooled over starts."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np

from ensemble_horizon.horizon.curve_limits import Curve
from ensemble_horizon.night.variables import Places, Variable
from ensemble_horizon.spread.moments import beyond_median, component_deviations, variance_of
from ensemble_horizon.spread.reduction import Summary
from ensemble_horizon.spread.sampling import (
    LEAST_STARTS,
    mean_over_starts,
    noise_from_gram,
    pooled_noise,
)


def curves_of_start(
    summary: Summary, variable: Variable, places: Places, kurtosis: float
) -> list[Curve]:
    """Curves of all places of one start, regions first."""
    curves = [
        _region_curve(summary, variable, places, number, kurtosis)
        for number in range(len(places.regions))
    ]
    curves += [
        _site_curve(summary, variable, places, number, kurtosis)
        for number in range(len(places.sites))
    ]
    return curves


def members_of_start(summary: Summary) -> int:
    """Members that have a value at any lead."""
    return int(np.isfinite(summary.low).any(axis=0).sum())


def _region_curve(
    summary: Summary, variable: Variable, places: Places, number: int, kurtosis: float
) -> Curve:
    region = places.regions[number]
    weight = summary.region_weight[:, number]
    with np.errstate(invalid="ignore", divide="ignore"):
        variance = np.where(weight > 0, summary.region_sum[:, number] / weight, np.nan)
        # (A, T, M): share of the region's area where each member is beyond
        beyond = summary.region_beyond[:, :, number] / weight[:, np.newaxis]
    present = np.isfinite(summary.low)
    beyond = beyond * present.sum(axis=1)[:, np.newaxis]
    climatology = float("nan")
    if variable.climatology is not None:
        local = variable.climatology[region.index]
        known = np.isfinite(local)
        if known.any():
            mean = np.average(local[known] ** 2, weights=region.weight[known])
            climatology = float(np.sqrt(mean))
    shares, numbers = _shares(variable, beyond, present)
    noise = noise_from_gram(summary.gram[:, number], kurtosis)
    return Curve(np.sqrt(variance) * variable.factor, noise, climatology, shares, numbers)


def _site_curve(
    summary: Summary, variable: Variable, places: Places, number: int, kurtosis: float
) -> Curve:
    values = summary.site_values[:, :, number]  # (T, M, C)
    first, *across = values.transpose(2, 1, 0)
    deviations, count = component_deviations([first, *across])
    variance = variance_of(deviations, count)
    gram = sum(part.T[:, :, np.newaxis] * part.T[:, np.newaxis] for part in deviations)
    noise = noise_from_gram(np.asarray(gram), kurtosis, one_place=bool(across))
    beyond = np.array(
        [beyond_median(first, item / variable.factor, *across).T for item in variable.distances],
        dtype=float,
    ).reshape(len(variable.distances), *values.shape[:2])
    shares, numbers = _shares(variable, beyond, np.isfinite(first.T))
    climatology = float("nan")
    if variable.climatology is not None:
        climatology = float(variable.climatology[places.site_index[number]])
    return Curve(np.sqrt(variance) * variable.factor, noise, climatology, shares, numbers)


def _shares(
    variable: Variable, beyond: np.ndarray, present: np.ndarray
) -> tuple[dict[float, np.ndarray], dict[float, np.ndarray]]:
    """Shares (T,) by distance and how many independent members they are worth.

    A region's share scatters less than that of one point, as its parts are not all beyond at
    once: the variance between members says by how much.
    """
    count = present.sum(axis=1)
    shares, numbers = {}, {}
    for distance, field in zip(variable.distances, beyond, strict=True):
        each = np.where(present, field, np.nan)
        with np.errstate(invalid="ignore", divide="ignore"):
            share = np.where(count > 0, np.nansum(each, axis=1) / count, np.nan)
            spread = np.nansum((each - share[:, np.newaxis]) ** 2, axis=1) / (count - 1)
            worth = share * (1 - share) / (spread / count)
        worth = np.where(np.isfinite(worth), worth, count)
        shares[distance] = share
        numbers[distance] = np.clip(worth, 1, 100.0 * np.maximum(count, 1))
    return shares, numbers


def pool_starts(curves: Sequence[Curve], confidence: float) -> Curve:
    """One curve for many starts of one place: variances averaged over starts."""
    variances = np.stack([curve.spread**2 for curve in curves])
    noise = pooled_noise(variances[..., np.newaxis], [curve.noise for curve in curves], confidence)
    shares, numbers = {}, {}
    for distance in curves[0].shares:
        each = np.stack([curve.shares[distance] for curve in curves])
        known = np.isfinite(each)
        starts = known.sum(axis=0)
        share = mean_over_starts(each)
        worth = np.sum([curve.share_numbers[distance] for curve in curves] * known, axis=0)
        if len(curves) >= LEAST_STARTS:
            with np.errstate(invalid="ignore", divide="ignore"):
                scatter = np.where(known, (each - share) ** 2, 0.0).sum(axis=0) / (starts - 1)
                between = share * (1 - share) / (scatter / starts)
            worth = np.fmin(worth, np.where(np.isfinite(between), between, worth))
        shares[distance], numbers[distance] = share, np.maximum(worth, 1.0)
    spread = np.sqrt(mean_over_starts(variances))
    return Curve(spread, noise, curves[0].climatology, shares, numbers)
