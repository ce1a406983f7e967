"""Limits of single curves: regions and sites, each with the noise of its own members."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field

import numpy as np

from ensemble_horizon.growth.laws import LAWS
from ensemble_horizon.horizon.criteria import Chance, Criterion, Levels
from ensemble_horizon.horizon.curve_growth import Growth
from ensemble_horizon.horizon.horizon import judge
from ensemble_horizon.horizon.interval import calibrated_moves, share_bounds, spread_bounds
from ensemble_horizon.horizon.trend import grows
from ensemble_horizon.spread.sampling import LeadNoise
from ensemble_horizon.vocabulary import Status

# A fit further from the curve than this many times the sampling noise is no stand-in for it.
_FAITHFUL = 2.0


@dataclass(frozen=True)
class Curve:
    """One growth curve and what is known about its noise.

    Parameters
    ----------
    spread : (L,) in the units of the variable, NaN where there is none
    noise : LeadNoise
    climatology : float
        Climatological standard deviation, NaN where it is not known.
    shares : mapping of distance to (L,) shares of members beyond it
    share_numbers : mapping of distance to (L,) number of independent members those are worth
    """

    spread: np.ndarray
    noise: LeadNoise
    climatology: float = float("nan")
    shares: Mapping[float, np.ndarray] = field(default_factory=dict)
    share_numbers: Mapping[float, np.ndarray] = field(default_factory=dict)


@dataclass(frozen=True)
class Limit:
    """One horizon of one curve; ``projected`` is where the law places one beyond the run."""

    threshold: float
    horizon: float
    low: float
    high: float
    status: Status
    projected: float


def limits_of_curve(
    lead: np.ndarray,
    curve: Curve,
    growth: Growth,
    criteria: Sequence[Criterion],
    hold: float,
    confidence: float,
) -> list[Limit]:
    """The horizon of a curve under each criterion, with its interval."""
    covariance = curve.noise.log_spread_covariance()
    growing = grows(lead, curve.spread[:, np.newaxis], covariance)
    levels = Levels(saturation=growth.values["saturation"], climatology=curve.climatology)
    found = []
    for criterion in criteria:
        threshold = float(np.asarray(criterion.threshold(levels)))
        if isinstance(criterion, Chance):
            found.append(_chance_limit(lead, curve, criterion, growing, hold, confidence))
        else:
            found.append(
                _spread_limit(lead, curve, growth, criterion, threshold, growing, hold, confidence)
            )
    return found


def _spread_limit(
    lead: np.ndarray,
    curve: Curve,
    growth: Growth,
    criterion: Criterion,
    threshold: float,
    growing: np.ndarray,
    hold: float,
    confidence: float,
) -> Limit:
    column = curve.spread[:, np.newaxis]
    time, flags = judge(lead, column, np.array([threshold]), hold, growing.__getitem__)
    status = Status(int(flags[0]))
    low = high = projected = float("nan")
    if status not in (Status.no_data, Status.no_growth):
        pull = growth.saturation_pull if criterion.kind == "saturation_fraction" else None
        moves = calibrated_moves(
            lead, _stand_in(curve, growth), threshold, curve.noise, confidence,
            hold=hold, threshold_pull=pull,
        )  # fmt: skip
        ends = spread_bounds(lead, column, threshold, curve.noise.dof, moves, hold)
        low, high = float(ends[0][0]), float(ends[1][0])
    if status is Status.beyond_run and growth.law in LAWS:
        reached = float(LAWS[growth.law].time_to(growth.parameters[np.newaxis], threshold)[0])
        # A law that says "within the run" where the curve says "not yet" projects nothing.
        projected = reached if lead[-1] < reached < np.inf else float("nan")
    return Limit(threshold, float(time[0]), low, high, status, projected)


def _chance_limit(
    lead: np.ndarray,
    curve: Curve,
    criterion: Chance,
    growing: np.ndarray,
    hold: float,
    confidence: float,
) -> Limit:
    shares = curve.shares[criterion.beyond][:, np.newaxis]
    threshold = np.array([criterion.probability])
    time, flags = judge(lead, shares, threshold, hold, growing.__getitem__)
    status = Status(int(flags[0]))
    low = high = float("nan")
    if status not in (Status.no_data, Status.no_growth):
        number = curve.share_numbers[criterion.beyond][:, np.newaxis]
        ends = share_bounds(lead, shares, number, criterion.probability, confidence, hold)
        low, high = float(ends[0][0]), float(ends[1][0])
    return Limit(criterion.probability, float(time[0]), low, high, status, float("nan"))


def _stand_in(curve: Curve, growth: Growth) -> np.ndarray:
    """The fitted law where it is faithful to the curve, else the curve itself."""
    with np.errstate(divide="ignore", invalid="ignore"):
        misfit = np.log(growth.fitted) - np.log(curve.spread)
    known = np.isfinite(misfit)
    if not known.any():
        return curve.spread
    noise = np.sqrt(np.diag(curve.noise.log_spread_covariance()))
    faithful = np.sqrt(np.mean(misfit[known] ** 2)) <= _FAITHFUL * np.mean(noise[known])
    return growth.fitted if faithful else curve.spread
