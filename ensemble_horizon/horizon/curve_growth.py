"""The fitted law of single curves, with intervals from the sampling of members."""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
from scipy import special

from ensemble_horizon.growth.fitting import TOLERANCE
from ensemble_horizon.growth.growth import FEWEST_POINTS
from ensemble_horizon.growth.law import Law
from ensemble_horizon.growth.laws import LAWS
from ensemble_horizon.growth.selection import NO_LAW, Selection, select_law
from ensemble_horizon.horizon.chosen import chosen_groups, quantity_sensitivity
from ensemble_horizon.spread.sampling import LeadNoise, chi_square_quantile

LN2 = float(np.log(2.0))
_MOST_ERROR = 4.0  # times the size itself: beyond that the curve does not tell the size at all
QUANTITIES = ("growth_rate", "initial_error", "saturation")


@dataclass(frozen=True)
class Growth:
    """The fitted law of one curve.

    Parameters
    ----------
    law : str
        Name of the law, "none" where there is no fit.
    fitted : (L,) values of the law at the leads
    values : mapping
        ``growth_rate``, ``doubling_time``, ``initial_error``, ``saturation``, each also with
        ``_low`` and ``_high``, ``doubling_time_at_start``, and the parameters of all laws; NaN
        where the law has none, infinite where errors never double.
    parameters : (P,) of the law
    saturation_pull : (L,) or None
        Derivative of ln(saturation) with respect to ln(curve) at each lead.
    """

    law: str
    fitted: np.ndarray
    values: dict[str, float]
    parameters: np.ndarray
    saturation_pull: np.ndarray | None


def growth_of_curves(
    lead: np.ndarray,
    spreads: np.ndarray,
    noises: list[LeadNoise],
    law: str,
    scale: str,
    confidence: float,
) -> list[Growth]:
    """Fit N curves (N, L) and give what they say its interval.

    The interval is first order: the noise of ln(spread) between leads carried through the
    derivative of the fit. It is conditional on the law.
    """
    selection = select_where_enough(lead, spreads, law, scale)
    found = [_nothing(lead) for _ in noises]
    for record, rows, parameters in chosen_groups(selection):
        for row, own in zip(rows, parameters, strict=True):
            found[row] = _growth_of(
                lead, spreads[row], noises[row], record, own[np.newaxis], scale, confidence
            )
    return found


def select_where_enough(
    lead: np.ndarray,
    spreads: np.ndarray,
    law: str,
    scale: str,
    tolerance: float = TOLERANCE,
) -> Selection:
    """The law of each of N curves (N, L), none where fewer than five leads can be used.

    With about as many leads as parameters a law passes through any points and says nothing.
    """
    if lead.size < FEWEST_POINTS:
        return Selection((), np.full(spreads.shape[0], NO_LAW), ())
    names = None if law == "auto" else [law]
    selection = select_law(lead, spreads, names, scale=scale, tolerance=tolerance)
    with np.errstate(invalid="ignore"):
        usable = (spreads > 0) if scale == "log" else np.isfinite(spreads)
    enough = usable.sum(axis=1) >= FEWEST_POINTS
    return replace(selection, chosen=np.where(enough, selection.chosen, NO_LAW))


def _growth_of(
    lead: np.ndarray,
    spread: np.ndarray,
    noise: LeadNoise,
    law: Law,
    parameters: np.ndarray,
    scale: str,
    confidence: float,
) -> Growth:
    covariance = noise.log_spread_covariance()
    quantile = noise.inflation * float(special.ndtri(1 - (1 - confidence) / 2))
    usable = np.isfinite(spread)[np.newaxis] & (spread > 0)
    values = _empty_values()
    values.update(zip(law.parameters, map(float, parameters[0]), strict=True))
    pull = None
    for quantity in QUANTITIES:
        value = float(getattr(law, quantity)(parameters)[0])
        weight = quantity_sensitivity(law, quantity, parameters, lead, usable, scale)[0]
        error = float(np.sqrt(max(weight @ covariance @ weight, 0.0)))
        if quantity == "growth_rate":
            low, high = value - quantile * error, value + quantile * error
        else:
            low, high = _size_interval(value, error, noise, scale, quantile)
        values.update({quantity: value, f"{quantity}_low": low, f"{quantity}_high": high})
        if quantity == "saturation" and np.isfinite(value):
            pull = weight / value
    # The law's own doubling time: under the power law the rate falls while the error doubles.
    middle = float(law.doubling_time(parameters)[0])
    plain = _doubling(values["growth_rate"])
    longer = middle / plain if 0 < plain < np.inf else 1.0
    values["doubling_time"] = middle
    for end, rate in (("_low", "_high"), ("_high", "_low")):
        values[f"doubling_time{end}"] = longer * _doubling(values[f"growth_rate{rate}"])
    initial = law.initial_error(parameters)
    values["doubling_time_at_start"] = float(law.doubling_time(parameters, initial)[0])
    return Growth(law.name, law.value(parameters, lead)[0], values, parameters[0], pull)


def _nothing(lead: np.ndarray) -> Growth:
    return Growth("none", np.full(lead.size, np.nan), _empty_values(), np.empty(0), None)


def _size_interval(
    value: float, error: float, noise: LeadNoise, scale: str, quantile: float
) -> tuple[float, float]:
    """Interval of a size: chi-square with the degrees of freedom that its error is worth.

    ln(spread) of few members lies below that of many by (ln(dof/2) - digamma(dof/2))/2. A fit that
    averages over leads keeps that bias while its scatter shrinks, so it is taken off here; a fit
    on the linear scale has about half of it.
    """
    if not (value > 0 and np.isfinite(value)):
        return float("nan"), float("nan")
    if error > _MOST_ERROR * value:
        return 0.0, float("inf")
    relative = 4 * max(error / value, 1e-6) ** 2
    half = (1 + np.sqrt(1 + 2 * relative)) / (2 * relative)  # inverse of trigamma, near enough
    bias = float(np.median(_log_bias(noise.dof / 2))) - float(_log_bias(np.array(half)))
    center = value * np.exp(max(bias, 0.0) * (1.0 if scale == "log" else 0.5))
    tail = float(special.ndtr(-quantile))
    low, high = chi_square_quantile(np.array([tail, 1 - tail]), 2 * half)
    return center * float(np.sqrt(2 * half / high)), center * float(np.sqrt(2 * half / low))


def _log_bias(half: np.ndarray) -> np.ndarray:
    return np.asarray((np.log(half) - special.digamma(half)) / 2)


def _doubling(rate: float) -> float:
    if np.isnan(rate):
        return rate
    return LN2 / rate if rate > 0 else float("inf")


def _empty_values() -> dict[str, float]:
    names = [
        f"{name}{end}" for name in (*QUANTITIES, "doubling_time") for end in ("", "_low", "_high")
    ]
    shape = [name for law in LAWS.values() for name in law.parameters]
    return dict.fromkeys([*names, "doubling_time_at_start", *shape], float("nan"))
