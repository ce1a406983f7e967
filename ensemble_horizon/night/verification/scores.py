"""Scores and skill limits of places, from what each start brings."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from ensemble_horizon.horizon.skill_limits import Falls, falls_of_curves
from ensemble_horizon.skill.blocks import BlockInterval, block_interval
from ensemble_horizon.skill.flatness import Flatness, flatness
from ensemble_horizon.skill.interval import STATISTICS, Interval, statistic_interval
from ensemble_horizon.skill.quantities import QUANTITIES
from ensemble_horizon.skill.reduction import ScoreSums


@dataclass(frozen=True)
class Score:
    """A score that is a statistic over starts.

    Parameters
    ----------
    name, text : str
    statistic : name in `ensemble_horizon.skill.interval.STATISTICS`
    inputs : quantities of `ensemble_horizon.skill.quantities`
    sized : bool
        Whether it is in the units of the variable.
    """

    name: str
    text: str
    statistic: str
    inputs: tuple[str, ...]
    sized: bool = False


SCORES = (
    Score("bias", "mean error of the ensemble mean", "mean", ("error",), True),
    Score("rmse", "RMSE of the ensemble mean", "rmse", ("squared_error",), True),
    Score("spread", "ensemble spread", "rmse", ("variance",), True),
    Score(
        "spread_error_ratio", "ratio of spread, times root of (M + 1)/M, to RMSE", "ratio",
        ("expected_squared_error", "squared_error"),
    ),
    Score("crps", "fair CRPS", "mean", ("crps",), True),
    Score(
        "skill_climatology", "skill of the fair CRPS over climatology", "skill",
        ("crps", "climatology_crps"),
    ),
    Score(
        "skill_persistence", "skill of the fair CRPS over persistence", "skill",
        ("crps", "persistence_crps"),
    ),
    Score(
        "anomaly_correlation", "anomaly correlation of the ensemble mean", "correlation",
        ("product", "forecast_squared", "anomaly_squared"),
    ),
    Score("outside", "share of analyses outside the range of the members", "mean", ("outside",)),
    Score(
        "outside_expected", "that share of a reliable ensemble", "mean", ("outside_expected",)
    ),
    Score("control_bias", "mean error of the control", "mean", ("control_error",), True),
    Score("control_rmse", "RMSE of the control", "rmse", ("control_squared_error",), True),
    Score("control_error", "mean absolute error of the control", "mean", ("control_crps",), True),
    Score(
        "control_anomaly_correlation", "anomaly correlation of the control", "correlation",
        ("control_product", "control_forecast_squared", "anomaly_squared"),
    ),
    Score("climatology_rmse", "RMSE of the climatology", "rmse", ("anomaly_squared",), True),
    Score(
        "persistence_rmse", "RMSE of persistence", "rmse", ("persistence_squared_error",), True
    ),
)  # fmt: skip

# Which scores have a limit, and what they fall to.
SKILLS = ("skill_climatology", "skill_persistence")
CORRELATIONS = ("anomaly_correlation", "control_anomaly_correlation")


@dataclass(frozen=True)
class PlaceScores:
    """Scores of R places over L leads.

    Parameters
    ----------
    scores : by name, each member of the interval (L, R)
    blocks : by name, each member of the interval by resampled blocks (L, R); empty unless asked for
    limits : by name of the score, each member of the falls (R,)
    ranks : (L, R, M + 1) shares, averaged over starts
    flat : each member (L, R)
    """

    scores: dict[str, Interval]
    blocks: dict[str, BlockInterval]
    limits: dict[str, Falls]
    ranks: np.ndarray
    flat: Flatness


def series_of(sums: Sequence[ScoreSums], quantity: str) -> np.ndarray:
    """What each start brings of a quantity: (S, L, R), NaN where nothing."""
    return np.stack([item.mean(quantity) for item in sums])


def place_scores(
    lead: np.ndarray,
    sums: Sequence[ScoreSums],
    factor: float,
    levels: dict[str, float],
    confidence: float,
    count: int,
    resamples: int = 0,
) -> PlaceScores:
    """All scores that the sums of all starts give.

    Parameters
    ----------
    lead : (L,)
    sums : one a start, in order of time
    factor : from the units of the files to those of the results, for differences
    levels : what the scores that have a limit fall to
    confidence : of the intervals
    count : how many places are scored, of those in the sums
    resamples : of blocks of starts, for a second opinion on the intervals
    """
    series = {name: series_of(sums, name)[..., :count] for name in QUANTITIES}
    starts, leads, places = series["error"].shape
    scores: dict[str, Interval] = {}
    blocks: dict[str, BlockInterval] = {}
    for score in SCORES:
        inputs = np.stack([series[name] for name in score.inputs])
        if not np.isfinite(inputs).all(axis=0).any():
            continue
        flat = inputs.reshape(len(score.inputs), starts, -1)
        found = statistic_interval(STATISTICS[score.statistic], flat, confidence)
        size = factor if score.sized else 1.0
        # A score held against an error of zero, persistence at its own start, is none.
        scaled = {name: _finite(getattr(found, name) * size) for name in ("value", "low", "high")}
        found = found._replace(**scaled)
        scores[score.name] = Interval(*(item.reshape(leads, places) for item in found))
        if resamples:
            drawn = block_interval(STATISTICS[score.statistic], flat, confidence, resamples)
            drawn = drawn._replace(low=_finite(drawn.low * size), high=_finite(drawn.high * size))
            blocks[score.name] = BlockInterval(*(item.reshape(leads, places) for item in drawn))
    limits = {
        name: falls_of_curves(lead, *scores[name][:3], level=level)
        for name, level in levels.items()
        if name in scores
    }
    counts = np.stack([item.ranks[:, :count] for item in sums])
    return PlaceScores(scores, blocks, limits, *_ranks(counts))


def limit_levels(skill: float, correlation: float) -> dict[str, float]:
    """What each score with a limit falls to."""
    return dict.fromkeys(SKILLS, skill) | dict.fromkeys(CORRELATIONS, correlation)


def _finite(values: np.ndarray) -> np.ndarray:
    return np.where(np.isfinite(values), values, np.nan)


def _ranks(counts: np.ndarray) -> tuple[np.ndarray, Flatness]:
    """Mean shares (L, R, M + 1) and the test of flat ranks, from counts (S, L, R, M + 1)."""
    starts, leads, places, number = counts.shape
    series = counts.transpose(0, 3, 1, 2).reshape(starts, number, -1)
    flat = flatness(series)
    with np.errstate(invalid="ignore", divide="ignore"):
        total = counts.sum(axis=0)
        shares = total / total.sum(axis=-1, keepdims=True)
    return shares, Flatness(*(np.asarray(item).reshape(leads, places) for item in flat))
