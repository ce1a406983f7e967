"""Tonight against what is usual, in words."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

from ensemble_horizon.products.limits import Limit
from ensemble_horizon.products.wording import interval, lead_number, lead_units
from ensemble_horizon.vocabulary import Status

if TYPE_CHECKING:
    from ensemble_horizon.horizon.usual import Usual

_WORDS = {
    "shorter": "shorter than usual",
    "longer": "longer than usual",
    "usual": "as usual",
    "unknown": "usual not known",
}
_EDGE = "about the edge of the usual"
_ROUNDING = 1e-6


def standing_name(usual: Usual | None, limit: Limit | None = None) -> str:
    """Return ``shorter``, ``longer``, ``usual`` or ``unknown``.

    Where ``limit`` and the edge of the usual are told by the same number, it is ``usual``.
    """
    if usual is None:
        return "unknown"
    return "usual" if at_edge(usual, limit) else usual.standing.name


def at_edge(usual: Usual, limit: Limit | None) -> bool:
    """Whether the limit and the edge of the usual range are told by the same number."""
    if limit is None or limit.status != Status.reached or not np.isfinite(usual.edge):
        return False
    here, edge = (lead_number(lead, limit.horizon_units) for lead in (limit.horizon, usual.edge))
    return here == edge


def standing_words(usual: Usual | None, limit: Limit | None = None) -> str:
    """Return the standing as people say it: ``shorter than usual``.

    With the limit of tonight it is also told where it lies at the edge of the usual range, or where
    its interval holds that edge.
    """
    words = _WORDS[standing_name(usual)]
    if usual is None or limit is None:
        return words
    if at_edge(usual, limit):
        return _EDGE
    if usual.within(limit.low, limit.high):
        return f"{words}, within its interval"
    why = unknown_because(usual)
    return f"{words}: {why}" if why else words


def unknown_because(usual: Usual) -> str:
    """Return why nothing is called usual: ``5 of the 10 nights needed``; else nothing."""
    if standing_name(usual) != "unknown":
        return ""
    if usual.nights < usual.needed:
        return f"{usual.nights} of the {usual.needed} nights needed"
    return ""


def rank_words(usual: Usual | None, *, short: bool = False) -> str:
    """Return tonight's place among the past nights: ``shorter than 11 of 12 past nights``.

    Nights as long as tonight do not count; runs that ended before they could tell are shared out by
    the product limit, and then the number is ``about`` one. Bounds are ``at least``. ``short``
    leaves the time of year out.
    """
    if usual is None or standing_name(usual) == "unknown":
        return ""
    low, high = usual.percentile, usual.percentile
    if np.isnan(low):
        low, high = usual.percentile_bounds
    if np.isnan(low) or low < 50 < high:
        return ""
    side, share = ("longer", low) if low >= 50 else ("shorter", 100 - high)
    count = usual.nights * share / 100
    whole = int(count + _ROUNDING)
    sign = "at least " if low != high else ""
    # A tie leaves half a night over, and nothing else does where all runs were long enough.
    if abs(2 * count - round(2 * count)) > 1e-3:
        sign, whole = sign or "about ", round(count)
    past = "past night" if usual.nights == 1 else "past nights"
    nights = f"all {usual.nights}" if whole == usual.nights else f"{sign}{whole} of {usual.nights}"
    season = " of this time of year" if usual.season and not short else ""
    return f"{side} than {nights} {past}{season}"


def usual_words(usual: Usual | None, units: str) -> str:
    """Return median and range of the past nights: ``120 h (98 to beyond the run)``, or a dash."""
    if usual is None or np.isnan(usual.median):
        return "–"
    if np.isinf(usual.median):
        median = "beyond the run"
    else:
        median = f"{lead_number(usual.median, units)} {lead_units(units)}"
    return f"{median} {interval(usual.low, usual.high, units)}".strip()
