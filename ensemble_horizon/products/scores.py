"""Scores and skill limits as records: one per variable, place, score and lead, or per limit."""

from __future__ import annotations

from collections.abc import Iterable, Iterator
from dataclasses import dataclass
from typing import Protocol

import numpy as np
import xarray as xr

from ensemble_horizon.products.wording import duration, interval
from ensemble_horizon.vocabulary import LEAD, LIMIT, PLACE, SCORE, Status

BLOCK_COLUMNS = {
    "block_low": "lower end of the interval by resampled blocks of starts, a second opinion",
    "block_high": "upper end of that interval",
    "block_length": "mean length of the blocks, in starts",
}


class ScoredVariable(Protocol):
    """What is known of one variable: scores of places, and its maps if there are any."""

    @property
    def places(self) -> xr.Dataset:
        """Scores, ranks and skill limits of regions and sites."""

    @property
    def maps(self) -> xr.Dataset | None:
        """Scores and skill limits per grid point."""


@dataclass(frozen=True)
class ScoreRecord:
    """One score at one lead; NaN where there is no number."""

    variable: str
    place: str
    against: str
    score: str
    lead: float
    lead_units: str
    value: float
    low: float
    high: float
    units: str
    starts: int
    block_low: float = float("nan")
    block_high: float = float("nan")
    block_length: float = float("nan")


@dataclass(frozen=True)
class SkillLimit:
    """Where a score falls to a level, and up to where it is significantly above it."""

    variable: str
    place: str
    against: str
    score: str
    text: str
    level: float
    horizon: float
    low: float
    high: float
    status: Status
    significant_until: float
    significant_status: Status
    units: str
    last_lead: float
    starts: int
    gap: float

    @property
    def words(self) -> str:
        """The horizon in plain words, with its interval."""
        if self.status == Status.reached:
            ends = interval(self.low, self.high, self.units)
            text = f"{duration(self.horizon, self.units)} {ends}".strip()
            gap = duration(self.gap, self.units) if np.isfinite(self.gap) else ""
            return f"{text}, within {gap} without a score" if gap else text
        words = self._without_number(self.status)
        if self.status == Status.beyond_run and np.isfinite(self.low):
            return f"{words[:-1]}; at least {duration(self.low, self.units)})"
        return words

    @property
    def significant_words(self) -> str:
        """Up to where the score is significantly above its level."""
        if self.significant_status == Status.reached:
            return duration(self.significant_until, self.units)
        if self.significant_status == Status.no_data:
            return "too few starts" if self.status != Status.no_data else "–"
        return self._without_number(self.significant_status)

    def _without_number(self, status: Status) -> str:
        if status == Status.beyond_run:
            return f"beyond the run (> {duration(self.last_lead, self.units)})"
        return "not even at the first lead" if status == Status.at_start else "too little known"


def score_records(results: Iterable[ScoredVariable]) -> Iterator[ScoreRecord]:
    """Yield the scores in the order variable, place, score, lead."""
    for result in results:
        data = result.places.transpose(PLACE, SCORE, LEAD, ...)
        lead = data[LEAD].values
        units = str(data.attrs["lead_units"])
        cells = {name: data[name].values for name in ("value", "low", "high", "starts")}
        blocks = {name: data[name].values for name in BLOCK_COLUMNS if name in data}
        for row, place in enumerate(data[PLACE].values):
            for column, score in enumerate(data[SCORE].values):
                if not np.isfinite(cells["value"][row, column]).any():
                    continue
                for position, moment in enumerate(lead):
                    where = (row, column, position)
                    yield ScoreRecord(
                        variable=str(data.attrs["variable"]),
                        place=str(place),
                        against=str(data["against"].values[row]),
                        score=str(score),
                        lead=float(moment),
                        lead_units=units,
                        value=float(cells["value"][where]),
                        low=float(cells["low"][where]),
                        high=float(cells["high"][where]),
                        units=str(data["score_units"].values[column]),
                        starts=int(cells["starts"][where]),
                        **{name: float(values[where]) for name, values in blocks.items()},
                    )


def skill_limits(results: Iterable[ScoredVariable]) -> list[SkillLimit]:
    """Return the limits in the order variable, place, score."""
    return [limit for result in results for limit in _limits_of(result.places)]


def _limits_of(data: xr.Dataset) -> Iterator[SkillLimit]:
    for row, place in enumerate(data[PLACE].values):
        for name in data[LIMIT].values:
            one = data.isel({PLACE: row}).sel({LIMIT: name})
            yield SkillLimit(
                str(data.attrs["variable"]), str(place), str(one["against"].values), str(name),
                str(one["limit_text"].values), float(one["level"]), float(one["horizon"]),
                float(one["horizon_low"]), float(one["horizon_high"]),
                Status(int(one["status"])), float(one["significant_until"]),
                Status(int(one["significant_status"])), str(data.attrs["lead_units"]),
                float(data.attrs["last_lead"]), int(one["starts"].sel({SCORE: name}).max()),
                float(one["gap"]),
            )  # fmt: skip
