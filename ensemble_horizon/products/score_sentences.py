"""What past scores say of a variable at a place, in words: a record, and sentences of it."""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from dataclasses import dataclass

import numpy as np
import xarray as xr

from ensemble_horizon.products.scores import ScoredVariable, SkillLimit, skill_limits
from ensemble_horizon.products.wording import duration
from ensemble_horizon.vocabulary import LEAD, PLACE, SCORE, Status

_RATIO = "spread_error_ratio"
# The limit that is told is the first of these that is known.
_TOLD = ("skill_climatology", "skill_persistence", "anomaly_correlation")
# An interval that holds 1 says "about right" only where its ends are no further off than this.
_ABOUT_RIGHT = 1.25
TOO_LITTLE, ABOUT_RIGHT, TOO_MUCH = "too little", "about right", "too much"
CANNOT_BE_TOLD = "cannot be told"
_PARTING = {
    TOO_LITTLE: "the members part too little",
    ABOUT_RIGHT: "the members part about right",
    TOO_MUCH: "the members part too much",
    CANNOT_BE_TOLD: "it cannot be told whether the members part too little or too much",
}


@dataclass(frozen=True)
class PastSkill:
    """Past skill of one variable at one place, in words.

    Attributes
    ----------
    variable, long_name, place : str
    against : str
        ``analysis`` or ``observation``.
    starts : int
        Verified starts that the ratio rests on.
    lead : str
        In the middle of the run: ``120 h``.
    ratio : str
        Spread over error of the mean, with its interval: ``0.90 (0.53 to 1.3)``.
    parting : str
        ``too little``, ``about right``, ``too much`` or ``cannot be told``.
    score : str
        Of which the end is told: ``skill over climatology``; empty where none is known.
    end : str
        Where it falls to its level.
    until : str
        Up to where it is significantly above it.
    """

    variable: str
    long_name: str
    place: str
    against: str
    starts: int
    lead: str
    ratio: str
    parting: str
    score: str = ""
    end: str = ""
    until: str = ""

    @property
    def where(self) -> str:
        """The place, and what it is held against where that is an observation."""
        seen = self.against == "observation"
        return f"{self.place}, by its observations" if seen else self.place

    def sentences(self) -> tuple[str, ...]:
        """One or two plain sentences."""
        starts = f"{self.starts} verified starts" if self.starts > 1 else "verified start"
        told = [
            f"over the last {starts} {_PARTING[self.parting]}: the spread was {self.ratio} of the "
            f"error of the mean at {self.lead}"
        ]
        if self.end.startswith("not even"):
            told.append(f"there was no {self.score} even at the first lead")
        elif self.end:
            ended = "lasted" if self.end.startswith("beyond") else "ended at"
            told.append(f"{self.score} {ended} {self.end}{self._sure()}")
        return tuple(f"{self.long_name}: {text} for {self.where}." for text in told)

    def _sure(self) -> str:
        if self.until.startswith("not even"):
            return ", but was not significant even at the first lead,"
        if self.until.startswith("too few"):
            return ", too few starts to call it significant,"
        return f", significant until {self.until},"


def past_skill(result: ScoredVariable) -> Iterator[PastSkill]:
    """Yield what is known of each place that has a ratio of spread to error.

    In the order of the settings: a region before a site, an analysis before an observation. The
    ratio is that nearest to the middle of the run, the end that of the first score that has one.
    """
    data = result.places
    if _RATIO not in data[SCORE].values:
        return
    ratio = data[["value", "low", "high", "starts"]].sel({SCORE: _RATIO}).transpose(PLACE, LEAD)
    known = np.isfinite(ratio["value"].values)
    lead, limits = data[LEAD].values, skill_limits([result])
    for row in np.flatnonzero(known.any(axis=1)):
        there = np.flatnonzero(known[row])
        position = int(there[np.argmin(np.abs(lead[there] - lead[-1] / 2))])
        one = ratio.isel({PLACE: int(row), LEAD: position})
        place, against = str(one[PLACE].values), str(one["against"].values)
        here = [limit for limit in limits if (limit.place, limit.against) == (place, against)]
        yield PastSkill(
            str(data.attrs["variable"]),
            str(data.attrs["long_name"]),
            place,
            against,
            int(one["starts"]),
            duration(float(one[LEAD]), str(data.attrs["lead_units"])),
            _ratio_words(one),
            parting(float(one["low"]), float(one["high"])),
            *_end(here),
        )


def of_place_first(
    skill: Sequence[PastSkill], place: str, variable: str
) -> tuple[list[PastSkill], list[PastSkill]]:
    """Part what is known of ``place``, ``variable`` first, from what is known of other places."""
    here = [item for item in skill if item.place == place]
    others = [item for item in skill if item.place != place]
    return sorted(here, key=lambda item: item.variable != variable), others


def parting(low: float, high: float) -> str:
    """Return how the members part, from the interval of the ratio of spread to error.

    Examples
    --------
    >>> parting(0.77, 0.94), parting(0.92, 1.1), parting(1.1, 1.4), parting(0.53, 1.3)
    ('too little', 'about right', 'too much', 'cannot be told')
    """
    if high < 1:
        return TOO_LITTLE
    if low > 1:
        return TOO_MUCH
    return ABOUT_RIGHT if low >= 1 / _ABOUT_RIGHT and high <= _ABOUT_RIGHT else CANNOT_BE_TOLD


def two_digits(value: float) -> str:
    """Return ``value`` with two significant digits, whole numbers in full.

    Examples
    --------
    >>> two_digits(0.9), two_digits(1.327), two_digits(12.4), two_digits(134.0)
    ('0.90', '1.3', '12', '134')
    """
    return f"{value:.0f}" if abs(value) >= 99.5 else f"{value:#.2g}".removesuffix(".")


def _ratio_words(one: xr.Dataset) -> str:
    value, low, high = (float(one[name]) for name in ("value", "low", "high"))
    ends = "too few starts for an interval"
    if np.isfinite([low, high]).all():
        ends = f"{two_digits(low)} to {two_digits(high)}"
    return f"{two_digits(value)} ({ends})"


def _end(limits: Sequence[SkillLimit]) -> tuple[str, str, str]:
    """Name, end and significance of the first score that is known; empty where none is."""
    known = {limit.score: limit for limit in limits if limit.status != Status.no_data}
    for name in _TOLD:
        if name in known:
            limit = known[name]
            level = "" if limit.level == 0 else f" above {limit.level:g}"
            return f"{limit.text}{level}", limit.words, limit.significant_words
    return "", "", ""
