"""The shortest limits as lanes over one lead axis, each a bar from the start of the forecast.

Whole from the start to the lower end of the interval, hatched across the interval, a diamond at the
limit; behind it the box of what is usual, with its median.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from ensemble_horizon.products.limits import Limit
from ensemble_horizon.products.page.briefing import Briefing
from ensemble_horizon.products.page.clock import Clock, Tick
from ensemble_horizon.products.page.standing import (
    rank_words,
    standing_name,
    standing_words,
    usual_words,
)
from ensemble_horizon.products.tables import criterion_text
from ensemble_horizon.products.wording import (
    duration,
    horizon_text,
    interval,
    lead_units,
)
from ensemble_horizon.vocabulary import Status

if TYPE_CHECKING:
    from ensemble_horizon.horizon.usual import Usual

MOST_LANES = 10
_SHOWN = (Status.at_start, Status.reached, Status.beyond_run)


@dataclass(frozen=True)
class Bar:
    """A stretch of the axis in percent: where it begins, how wide it is."""

    x: float
    width: float


@dataclass(frozen=True)
class Lane:
    """One limit over the shared axis. Positions are percent of the axis; None where there is none.

    ``end`` says what stands at the end: ``limit`` (a diamond at ``mark``), ``beyond`` (open to the
    right) or ``start`` (over at once).
    """

    value: str
    range: str
    until: str
    place: str
    variable: str
    criterion: str
    standing: str
    standing_words: str
    rank: str
    usual: str
    whole: Bar | None
    doubtful: Bar | None
    mark: float | None
    end: str
    usual_box: Bar | None
    usual_mark: float | None
    usual_open: bool
    words: str


@dataclass(frozen=True)
class LaneChart:
    """The lanes, their axis, and what the headline says."""

    lanes: tuple[Lane, ...]
    ticks: tuple[Tick, ...]
    headline: str
    detail: str
    rest: str
    units: str


def lane_chart(briefing: Briefing, clock: Clock) -> LaneChart:
    """Return the chart of the shortest limits of a briefing."""
    ordered = [limit for limit in briefing.shortest_first() if limit.status in _SHOWN]
    last = max((limit.last_lead for limit in briefing.limits()), default=1.0) or 1.0
    shown = ordered[:MOST_LANES]
    lanes = tuple(_lane(limit, briefing.usual_of(limit), clock, last) for limit in shown)
    total = len(briefing.limits())
    left = total - len(shown)
    rest = ""
    if left > 0:
        them = "it is" if left == 1 else "they are"
        what = "further limit" if left == 1 else "further limits"
        rest = f"{left} {what} of {total} not shown here; {them} in the table below."
    standing = _standing_sentence(briefing.usual_of(shown[0]), shown[0]) if shown else ""
    detail = f"{_detail(shown, clock)} {standing}".strip()
    return LaneChart(
        lanes, clock.ticks(last), _headline(shown, total), detail, rest, lead_units(clock.units)
    )


def _headline(shown: list[Limit], total: int) -> str:
    if not total:
        return "No limit to list: the settings name no region, site or criterion."
    if not shown:
        return "No limit can be stated tonight: too little is known, or nothing grows."
    first = shown[0]
    what = f"{criterion_text(first)}, {first.long_name}, {first.place}"
    if first.status == Status.beyond_run:
        end = duration(first.last_lead, first.horizon_units)
        return f"No limit is reached within the run ({end}), at any place, by any criterion."
    if first.status == Status.at_start:
        return f"Over from the first lead on: {what}."
    return f"First to go: {what}."


def _detail(shown: list[Limit], clock: Clock) -> str:
    if not shown or shown[0].status != Status.reached:
        return ""
    moment = clock.at(shown[0].horizon)
    return f"The forecast holds for {shown[0].text}{f', until {moment}' if moment else ''}."


def _standing_sentence(usual: Usual | None, limit: Limit) -> str:
    if usual is None or standing_name(usual) == "unknown":
        return ""
    rank = rank_words(usual)
    behind = f" ({rank})" if rank else ""
    return f"That is {standing_words(usual, limit)}{behind}."


def _lane(limit: Limit, usual: Usual | None, clock: Clock, last: float) -> Lane:
    units = limit.horizon_units

    def share(lead: float) -> float:
        return round(100 * float(np.clip(lead / last, 0, 1)), 3)

    def bar(low: float, high: float) -> Bar | None:
        width = round(share(high) - share(low), 3)
        return Bar(share(low), width) if width > 0 else None

    end_of_run = min(limit.last_lead, last)
    if limit.status == Status.reached:
        low = limit.low if np.isfinite(limit.low) else limit.horizon
        high = limit.horizon if np.isnan(limit.high) else min(limit.high, end_of_run)
        whole, doubtful, mark = bar(0, low), bar(low, high), share(limit.horizon)
        end = "limit"
        value = duration(limit.horizon, units)
        spread = interval(limit.low, limit.high, units)
    elif limit.status == Status.beyond_run:
        low = limit.low if np.isfinite(limit.low) else end_of_run
        whole, doubtful, mark = bar(0, low), bar(low, end_of_run), share(end_of_run)
        end, value = "beyond", f"> {duration(limit.last_lead, units)}"
        spread = "beyond the run"
        if np.isfinite(limit.low):
            spread += f", perhaps from {duration(limit.low, units)}"
    else:
        whole, doubtful, mark, end = None, None, 0.0, "start"
        value, spread = "at once", "reached at the first lead"
    box, median, opened = None, None, False
    if usual is not None and not np.isnan(usual.median):
        box, median = bar(usual.low, usual.high), share(usual.median)
        opened = bool(np.isinf(usual.high))
    reached = limit.status == Status.reached
    return Lane(
        value=value,
        range=spread,
        until=clock.at(limit.horizon, zone="") if reached else "",
        place=limit.place,
        variable=limit.long_name,
        criterion=criterion_text(limit),
        standing=standing_name(usual, limit),
        standing_words=standing_words(usual, limit),
        rank=rank_words(usual, short=True),
        usual=usual_words(usual, units),
        whole=whole,
        doubtful=doubtful,
        mark=mark,
        end=end,
        usual_box=box,
        usual_mark=median,
        usual_open=opened,
        words=_lane_words(limit, usual),
    )


def _lane_words(limit: Limit, usual: Usual | None) -> str:
    text = horizon_text(
        limit.status,
        limit.horizon,
        limit.low,
        limit.high,
        float("nan"),
        limit.last_lead,
        limit.horizon_units,
    )
    known = usual_words(usual, limit.horizon_units)
    behind = f"; usual {known}" if known != "–" else "; usual not known"
    return f"{limit.place}, {limit.long_name}, {criterion_text(limit)}: {text}{behind}"
