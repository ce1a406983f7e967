"""Shares of starts still usable at each lead, where some runs end first: numpy kernels.

Times to the limit are waiting times, censored on the right where the run ends before the limit.
"""

from __future__ import annotations

from typing import NamedTuple

import numpy as np
from scipy import special


class Survival(NamedTuple):
    """Share of starts still usable, of K series of S starts.

    Parameters
    ----------
    time : (S, K) times in increasing order, an event before what is censored then; NaN at the end
    share : (S, K) share still usable after each time
    number : (S, K) uncensored starts that tell as much of the share, were starts independent:
        share (1 - share) over the variance of Greenwood; as before where that is zero
    event : (S, K) bool, the limit was reached at that time
    order : (S, K) int, the start that each time belongs to
    """

    time: np.ndarray
    share: np.ndarray
    number: np.ndarray
    event: np.ndarray
    order: np.ndarray


def survival(time: np.ndarray, event: np.ndarray) -> Survival:
    """Product-limit estimate of the share still usable.

    Parameters
    ----------
    time : (S, K) time to the limit, or to the end of the run; NaN where there is no start
    event : (S, K) bool, whether the limit was reached then; otherwise it is known to be later

    Notes
    -----
    Kaplan and Meier 1958 (Journal of the American Statistical Association); variance of Greenwood
    1926. Starts with the same time go one after the other, which leaves both as they are.

    Examples
    --------
    >>> found = survival(np.array([[6.0], [12.0], [12.0]]), np.array([[True], [True], [False]]))
    >>> found.share.ravel().round(4).tolist()
    [0.6667, 0.3333, 0.3333]
    """
    starts = time.shape[0]
    order = np.lexsort((~event, time), axis=0)
    sorted_time = np.take_along_axis(time, order, axis=0)
    happened = np.take_along_axis(event, order, axis=0) & np.isfinite(sorted_time)
    at_risk = np.isfinite(time).sum(axis=0) - np.arange(starts)[:, np.newaxis]
    share = np.cumprod(np.where(happened, 1 - 1 / np.maximum(at_risk, 1), 1.0), axis=0)
    variance = share**2 * np.cumsum(_greenwood(at_risk, happened), axis=0)
    number = _worth(share, variance, at_risk[0])
    unknown = ~np.isfinite(sorted_time)
    share[unknown], number[unknown] = np.nan, np.nan
    return Survival(sorted_time, share, number, happened, order)


def _worth(share: np.ndarray, variance: np.ndarray, starts: np.ndarray) -> np.ndarray:
    """Number (S, K) of uncensored starts; carried on where the last start has met its limit."""
    scatters = (variance > 0) & (share > 0)
    with np.errstate(invalid="ignore", divide="ignore"):
        own = np.where(scatters, share * (1 - share) / variance, 0.0)
    whole = np.concatenate([starts[np.newaxis].astype(float), own])
    place = np.arange(whole.shape[0])[:, np.newaxis]
    known = np.concatenate([np.ones((1, starts.size), dtype=bool), scatters])
    latest = np.maximum.accumulate(np.where(known, place, 0), axis=0)
    return np.take_along_axis(whole, latest, axis=0)[1:]


def share_at(found: Survival, leads: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """Share still usable after each of L leads, and the starts it is worth, both (L, K).

    NaN beyond the last time of a series whose share is not zero by then: nothing is known there.
    """
    columns = found.time.shape[1]
    starts = np.isfinite(found.time).sum(axis=0, dtype=float)[np.newaxis]
    past = np.stack([(found.time <= lead).sum(axis=0) for lead in leads])
    steps = (
        np.concatenate([np.ones((1, columns)), found.share]),
        np.concatenate([starts, found.number]),
    )
    share, number = (np.take_along_axis(step, past, axis=0) for step in steps)
    last = np.where(np.isfinite(found.time), found.time, -np.inf).max(axis=0, initial=-np.inf)
    unknown = (leads[:, np.newaxis] > last) & ~(share == 0)
    return np.where(unknown, np.nan, share), np.where(unknown, np.nan, number)


def influences(found: Survival, lead: float) -> np.ndarray:
    """What each start (S, K), in its own place, adds to the share still usable after a lead.

    Their mean is zero, and the mean of their squares over S the variance of Greenwood. Where no run
    ends before the lead they are one less the share for a start still usable, and minus the share
    for another.
    """
    starts = found.time.shape[0]
    known = np.isfinite(found.time)
    count = known.sum(axis=0)
    at_risk = count - np.arange(starts)[:, np.newaxis]
    past = found.time <= lead
    lost = np.cumsum(np.where(past, _greenwood(at_risk, found.event), 0.0), axis=0)
    own = np.where(past & found.event, 1 / np.maximum(at_risk - 1, 1), 0.0)
    share, _ = share_at(found, np.array([lead]))
    values = np.where(known, -count * share * (own - lost), np.nan)
    placed = np.empty_like(values)
    np.put_along_axis(placed, found.order, values, axis=0)
    return placed


def _greenwood(at_risk: np.ndarray, event: np.ndarray) -> np.ndarray:
    # After the last start the share is zero, whatever stands here.
    return np.where(event, 1 / np.maximum(at_risk * (at_risk - 1.0), 1.0), 0.0)


def log_rank(
    time: tuple[np.ndarray, np.ndarray], event: tuple[np.ndarray, np.ndarray]
) -> np.ndarray:
    """p-value (K,) of two samples of times having the same distribution, two-sided.

    Parameters
    ----------
    time, event : pairs of (S, K), as in `survival`

    Notes
    -----
    Mantel 1966 (Cancer Chemotherapy Reports). Takes all starts of both samples as independent. NaN
    where no limit is reached by either.
    """
    both, happened = np.concatenate(time), np.concatenate(event)
    of_first = np.zeros(both.shape, dtype=bool)
    of_first[: time[0].shape[0]] = True
    order = np.argsort(both, axis=0, kind="stable")
    moment, happened, of_first = (
        np.take_along_axis(part, order, axis=0) for part in (both, happened, of_first)
    )
    known = np.isfinite(moment)
    happened &= known
    place = np.arange(both.shape[0])[:, np.newaxis]
    differs = moment[1:] != moment[:-1]
    edge = np.ones((1, both.shape[1]), dtype=bool)
    first = np.maximum.accumulate(np.where(np.concatenate([edge, differs]), place, 0), axis=0)
    last = np.concatenate([differs, edge]) & known

    def before(flags: np.ndarray) -> np.ndarray:
        total = np.concatenate([np.zeros((1, flags.shape[1])), np.cumsum(flags, axis=0)])
        return np.take_along_axis(total, first, axis=0)

    at_risk = known.sum(axis=0) - first
    own = (known & of_first).sum(axis=0) - before(known & of_first)
    events = np.cumsum(happened, axis=0) - before(happened)
    share = own / np.maximum(at_risk, 1)
    spread = events * share * (1 - share) * (at_risk - events) / np.maximum(at_risk - 1, 1)
    surplus = (happened & of_first).sum(axis=0) - np.where(last, events * share, 0.0).sum(axis=0)
    with np.errstate(invalid="ignore", divide="ignore"):
        score = surplus / np.sqrt(np.where(last, spread, 0.0).sum(axis=0))
    return np.asarray(2 * special.ndtr(-np.abs(score)))
