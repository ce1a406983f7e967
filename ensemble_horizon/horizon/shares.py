"""Intervals of shares of dependent starts, and of the leads at which a share is left.

A share of n independent starts scatters like a binomial; of starts that repeat one another it
scatters more, by a design effect, so that n starts are worth n / effect (Kish 1965; effective sizes
with Student's t for shares: Korn and Graubard 1998, Survey Methodology). The effect is the variance
of the share over dependent starts (`mean_noise`) to that over independent ones (Greenwood), pooled
over leads, because a share near zero or one tells little of its own scatter. The interval is that
of Wilson 1927 (Journal of the American Statistical Association) with the effective number.
"""

from __future__ import annotations

from typing import NamedTuple

import numpy as np
from scipy import special

from ensemble_horizon.horizon.survival import Survival, influences, share_at
from ensemble_horizon.serial import Reason, mean_noise

_POOLED_LEADS = 16


class Dependence(NamedTuple):
    """How much more shares of K series scatter than those of independent starts.

    Parameters
    ----------
    effect : (K,) design effect, NaN where it cannot be told
    dof : (K,) degrees of freedom of it
    reason : (K,) int8, see `Reason`
    """

    effect: np.ndarray
    dof: np.ndarray
    reason: np.ndarray


def dependence(found: Survival, first_lead: float, last_lead: float) -> Dependence:
    """Design effect of the shares of K series, pooled over leads between the two."""
    columns = found.time.shape[1]
    serial, plain, weighted = np.zeros((3, columns))
    reason = np.full(columns, Reason.few_starts, dtype=np.int8)
    parts = []
    for lead in np.linspace(first_lead, last_lead, _POOLED_LEADS, endpoint=False):
        values = influences(found, float(lead))
        noise = mean_noise(values)
        share, number = (row[0] for row in share_at(found, np.array([lead])))
        given = noise.reason == Reason.given
        with np.errstate(invalid="ignore", divide="ignore"):
            variance = np.where(given, share * (1 - share) / number, 0.0)
        serial += np.where(given, noise.variance, 0.0)
        plain += variance
        weighted += np.where(given, variance * noise.dof, 0.0)
        reason = np.where(reason == Reason.given, reason, noise.reason)
        parts.append(np.where(given & np.isfinite(values), values, 0.0))
    with np.errstate(invalid="ignore", divide="ignore"):
        # Leads do not share the noise of their cosines, but that of the correlation they do: the
        # root lies between, and its intervals cover what they should.
        dof = weighted / plain * np.sqrt(_independent_leads(np.stack(parts)))
        return Dependence(serial / plain, dof, reason)


def _independent_leads(values: np.ndarray) -> np.ndarray:
    """Independent leads that L leads (L, S, K) are worth: (tr C)^2 / tr C^2, C between leads."""
    between = np.einsum("lsk,msk->lmk", values, values, optimize=True)
    trace = np.einsum("llk->k", between)
    return np.asarray(trace**2 / (between**2).sum(axis=(0, 1)))


def share_interval(
    share: np.ndarray, number: np.ndarray, depends: Dependence, confidence: float
) -> tuple[np.ndarray, np.ndarray]:
    """Ends (L, K) of the interval of shares (L, K).

    Parameters
    ----------
    share, number : (L, K), the number of independent starts that a share is worth

    Examples
    --------
    >>> plain = Dependence(np.ones(1), np.full(1, 1e9), np.zeros(1, dtype=np.int8))
    >>> low, high = share_interval(np.array([[0.5]]), np.array([[40]]), plain, 0.95)
    >>> low.round(3).tolist(), high.round(3).tolist()  # statsmodels: 0.352, 0.648
    ([[0.352]], [[0.648]])
    """
    quantile = special.stdtrit(depends.dof, 1 - (1 - confidence) / 2) ** 2
    with np.errstate(invalid="ignore", divide="ignore"):
        number = number / depends.effect
        middle = (share + quantile / (2 * number)) / (1 + quantile / number)
        reach = np.sqrt(share * (1 - share) * quantile / number + (quantile / number) ** 2 / 4)
        reach /= 1 + quantile / number
    return np.maximum(middle - reach, 0.0), np.minimum(middle + reach, 1.0)


class Quantile(NamedTuple):
    """Lead by which a part of the starts have met their limit, each (K,).

    Parameters
    ----------
    lead : infinite where it lies beyond the run, NaN where no start has a value
    low, high : infinite beyond the run, NaN where there is no interval
    """

    lead: np.ndarray
    low: np.ndarray
    high: np.ndarray


def quantile_lead(
    found: Survival,
    part: float,
    first_lead: float,
    depends: Dependence,
    confidence: float,
) -> Quantile:
    """Lead by which ``part`` of the starts have met their limit, with its interval.

    The interval holds every lead at which the interval of the share still usable holds
    ``1 - part`` (Brookmeyer and Crowley 1982, Biometrics).
    """
    starts = np.isfinite(found.time).sum(axis=0)
    rest = 1 - part
    low, high = share_interval(found.share, found.number, depends, confidence)
    begin, _ = share_interval(np.ones((1, starts.size)), starts[np.newaxis], depends, confidence)
    lower = np.where(begin[0] <= rest, first_lead, _first(found, low <= rest))
    ends = [lower, _first(found, high < rest)]
    silent = depends.reason != Reason.given
    lead = np.where(starts > 0, _first(found, found.share <= rest + 1e-12), np.nan)
    return Quantile(lead, *(np.where(silent, np.nan, end) for end in ends))


def _first(found: Survival, condition: np.ndarray) -> np.ndarray:
    """Time (K,) of the first event after which a condition (S, K) holds, infinite if never."""
    holds = condition & found.event
    place = np.argmax(holds, axis=0)[np.newaxis]
    time = np.take_along_axis(found.time, place, axis=0)[0]
    return np.where(holds.any(axis=0), time, np.inf)
