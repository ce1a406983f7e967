"""Hours gained: one record per variable, place and criterion of a comparison of two versions."""

from __future__ import annotations

from collections.abc import Iterable, Sequence
from dataclasses import dataclass
from typing import Protocol

import numpy as np
import xarray as xr

from ensemble_horizon.products.wording import duration, signed, start_text, with_units
from ensemble_horizon.vocabulary import CRITERION, PLACE

DISCOVERY_LEVEL = 0.1


class VersionsResult(Protocol):
    """What is known of one variable under two versions."""

    @property
    def places(self) -> xr.Dataset:
        """Hours gained by place and criterion."""

    @property
    def maps(self) -> xr.Dataset | None:
        """Hours gained by criterion and grid point."""

    @property
    def shares(self) -> tuple[xr.Dataset, xr.Dataset]:
        """Time to the limit under both versions."""


@dataclass(frozen=True)
class Gain:
    """Hours gained by version b over version a in one row; NaN where there is no number.

    ``reason`` says why there is an interval or none: ``given``, ``few_starts`` or ``no_scatter``.
    """

    variable: str
    long_name: str
    place: str
    kind: str
    criterion: str
    criterion_text: str
    starts: int
    horizon_a: float
    horizon_b: float
    gained: float
    low: float
    high: float
    p_value: float
    adjusted_p_value: float
    survives: bool
    log_rank_p: float
    beyond_a: int
    beyond_b: int
    counted_to: float
    units: str
    reason: str
    version_a: str
    version_b: str

    @property
    def text(self) -> str:
        """The hours gained in plain words, with their interval."""
        if not np.isfinite(self.gained):
            return "no data"
        words = f"{signed(self.gained, self.units)} {duration(0, self.units)[2:]}"
        if not np.isfinite(self.low):
            return words
        ends = (signed(end, self.units) for end in (self.low, self.high))
        return f"{words} ({' to '.join(ends)})"

    @property
    def verdict(self) -> str:
        """What may be said of the difference."""
        if self.survives:
            return f"{self.version_b if self.gained > 0 else self.version_a} holds longer"
        if self.starts == 0:
            return "no data"
        if self.reason == "few_starts":
            return "not judged, few starts"
        if self.reason == "no_scatter":
            return "no difference" if self.gained == 0 else "not judged, the same at every start"
        return "not told apart"


def gains(tables: Iterable[xr.Dataset]) -> list[Gain]:
    """Return the rows of all variables, in the order variable, place, criterion.

    Parameters
    ----------
    tables : iterable of Dataset
        The ``places`` of each variable.
    """
    return [row for places in tables for row in _rows(places)]


def telling_first(rows: Iterable[Gain]) -> list[Gain]:
    """Return the rows that tell the versions apart first, and the largest change first in each."""
    return sorted(
        rows,
        key=lambda row: (not row.survives, -abs(row.gained) if np.isfinite(row.gained) else 1.0),
    )


def summary_words(rows: Sequence[Gain]) -> str:
    """Return the outcome in one sentence."""
    first = rows[0]
    better = sum(row.survives and row.gained > 0 for row in rows)
    worse = sum(row.survives and row.gained < 0 for row in rows)
    judged = sum(np.isfinite(row.p_value) for row in rows)
    total = f"{len(rows)} row{'s' if len(rows) > 1 else ''}"
    if not judged:
        return f"None of {total} can be judged."
    rest = len(rows) - better - worse
    if rest == len(rows):
        return f"{first.version_a} and {first.version_b} are not told apart in any of {total}."
    words = f"{first.version_b} holds longer in {better} of {total}, {first.version_a} in {worse}"
    return f"{words}; {rest} not told apart or not judged." if rest else f"{words}."


def starts_words(places: xr.Dataset) -> str:
    """Return how many starts were compared, and from when to when."""
    first, last = (start_text(places.attrs[key]) for key in ("first_start", "last_start"))
    return f"{places.attrs['start_count']} common starts, {first} to {last}"


def _rows(places: xr.Dataset) -> Iterable[Gain]:
    about = places.attrs
    ordered = places.transpose(PLACE, CRITERION, ...)
    reasons = str(places["reason"].attrs["flag_meanings"]).split()
    values = {str(name): field.values for name, field in ordered.data_vars.items()}
    for row, place in enumerate(ordered[PLACE].values):
        for column, criterion in enumerate(ordered[CRITERION].values):
            at = (row, column)
            words = str(criterion)
            if str(ordered["criterion_kind"].values[column]) == "tolerance":
                words = with_units(words, str(ordered["threshold_units"].values[column]))
            yield Gain(
                variable=str(about["variable"]),
                long_name=str(about["long_name"]),
                place=str(place),
                kind=str(ordered["place_kind"].values[row]),
                criterion=str(criterion),
                criterion_text=words,
                starts=int(values["starts"][at]),
                horizon_a=float(values["mean_a"][at]),
                horizon_b=float(values["mean_b"][at]),
                gained=float(values["gained"][at]),
                low=float(values["gained_low"][at]),
                high=float(values["gained_high"][at]),
                p_value=float(values["p_value"][at]),
                adjusted_p_value=float(values["adjusted_p_value"][at]),
                survives=bool(values["survives"][at]),
                log_rank_p=float(values["log_rank_p"][at]),
                beyond_a=int(values["beyond_a"][at]),
                beyond_b=int(values["beyond_b"][at]),
                counted_to=float(about["restricted_to"]),
                units=str(about["lead_units"]),
                reason=reasons[int(values["reason"][at])],
                version_a=str(about["version_a"]),
                version_b=str(about["version_b"]),
            )
