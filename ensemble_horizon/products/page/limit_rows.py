"""The table of all limits, variable by variable, place by place."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass
from itertools import groupby

from ensemble_horizon.products.limits import Limit
from ensemble_horizon.products.page.briefing import Briefing
from ensemble_horizon.products.page.clock import Clock
from ensemble_horizon.products.page.standing import (
    rank_words,
    standing_name,
    standing_words,
    usual_words,
)
from ensemble_horizon.products.tables import criterion_parts
from ensemble_horizon.products.wording import duration
from ensemble_horizon.vocabulary import Status

STATUS_WORDS = {
    Status.reached: "within the run",
    Status.beyond_run: "beyond the run",
    Status.at_start: "reached at the first lead",
    Status.no_growth: "no growth, so no limit",
    Status.no_data: "too little known",
}


@dataclass(frozen=True)
class LimitRow:
    """One row: a criterion at a place."""

    criterion: str
    threshold: str
    limit: str
    until: str
    usual: str
    standing: str
    standing_words: str
    rank: str
    status: str
    status_name: str
    doubling: str
    members: str


@dataclass(frozen=True)
class PlaceRows:
    """The rows of one place."""

    place: str
    kind: str
    rows: tuple[LimitRow, ...]


@dataclass(frozen=True)
class VariableTable:
    """The limits of one variable."""

    variable: str
    long_name: str
    places: tuple[PlaceRows, ...]


def limit_tables(briefing: Briefing, clock: Clock) -> Iterator[VariableTable]:
    """Yield one table per variable, in the order of the settings."""
    for variable, found in groupby(briefing.limits(), key=lambda limit: limit.variable):
        limits = list(found)
        places = []
        for (place, kind), group in groupby(limits, key=lambda item: (item.place, item.place_kind)):
            rows = tuple(_row(briefing, limit, clock) for limit in group)
            places.append(PlaceRows(place, kind, rows))
        yield VariableTable(variable, limits[0].long_name, tuple(places))


def _row(briefing: Briefing, limit: Limit, clock: Clock) -> LimitRow:
    usual = briefing.usual_of(limit)
    criterion, threshold = criterion_parts(limit)
    return LimitRow(
        criterion=criterion,
        threshold=threshold,
        limit=limit.text,
        until=clock.at(limit.horizon) if limit.status == Status.reached else "",
        usual=usual_words(usual, limit.horizon_units),
        standing=standing_name(usual, limit),
        standing_words=standing_words(usual, limit),
        rank=rank_words(usual),
        status=STATUS_WORDS[limit.status],
        status_name=limit.status.name,
        doubling=duration(limit.doubling_time, limit.horizon_units),
        members="–" if limit.members is None else str(limit.members),
    )
