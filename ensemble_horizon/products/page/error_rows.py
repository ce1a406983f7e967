"""Which of two versions errs less: fair CRPS against what came true, by place and lead."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from itertools import groupby

import numpy as np

from ensemble_horizon.products.wording import number


@dataclass(frozen=True)
class ErrorRow:
    """Fair CRPS of both versions at one lead; NaN where there is no number.

    ``difference`` is that of b less that of a: below nought where b errs less. ``survives`` tells
    whether it stands among all rows of the comparison (false discovery rate).
    """

    variable: str
    place: str
    against: str
    score: str
    lead: float
    lead_units: str
    starts: int
    a: float
    b: float
    difference: float
    low: float
    high: float
    survives: bool
    units: str

    @property
    def text(self) -> str:
        """The difference with its interval."""
        words = _signed(self.difference)
        if np.isfinite([self.low, self.high]).all():
            words += f" ({_signed(self.low)} to {_signed(self.high)})"
        return f"{words} {self.units}" if self.units not in ("", "1") else words

    def verdict(self, version_a: str, version_b: str) -> str:
        """Say which version errs less, if that is told apart."""
        if not np.isfinite([self.low, self.high]).all():
            return "no difference" if self.difference == 0 else "not judged"
        better = version_b if self.difference < 0 else version_a
        if self.survives:
            return f"{better} errs less"
        if self.low > 0 or self.high < 0:
            return f"{better} errs less by this lead alone, not among all"
        return "not told apart"


def error_row(line: Mapping[str, str]) -> ErrorRow:
    """Read a line of ``score_differences.csv``."""

    def value(column: str) -> float:
        return float(line[column] or "nan")

    return ErrorRow(
        line["variable"], line["place"], line["against"], line["score"],
        value("lead"), line["lead_units"], int(line["starts"]),
        value("a"), value("b"), value("difference"), value("low"), value("high"),
        line["survives"] == "yes", line["units"],
    )  # fmt: skip


def middle_and_last(rows: Sequence[ErrorRow]) -> list[ErrorRow]:
    """Return of each variable and place the rows in the middle and at the end of the run."""

    def key(row: ErrorRow) -> tuple[str, str, str]:
        return row.variable, row.place, row.against

    found = []
    for _, group in groupby(rows, key=key):
        known = [row for row in group if np.isfinite(row.difference)]
        if not known:
            continue
        last = known[-1]
        middle = min(known, key=lambda row: abs(row.lead - last.lead / 2))
        found += [middle] if middle is last else [middle, last]
    return found


def outcome(rows: Sequence[ErrorRow], version_a: str, version_b: str) -> str:
    """Say in one sentence which version errs less, over all leads.

    Examples
    --------
    >>> outcome((), "old", "new")
    'Which of them errs less is not known: neither was held against analyses or observations'
    """
    if not rows:
        return (
            "Which of them errs less is not known: neither was held against analyses or "
            "observations"
        )
    told = [row for row in rows if row.survives]
    less_a = sum(row.difference > 0 for row in told)
    total = f"{len(rows)} rows of variable, place and lead"
    if not told:
        return f"By fair CRPS neither errs less in any of {total}"
    less_b = len(told) - less_a
    counts = [(version_a, less_a), (version_b, less_b)]
    (first, most), (second, fewer) = sorted(counts, key=lambda item: -item[1])
    return f"By fair CRPS {first} errs less in {most} of {total}, {second} in {fewer or 'none'}"


def _signed(value: float) -> str:
    if not np.isfinite(value):
        return "–"
    sign = "+" if value > 0 else "−" if value < 0 else ""
    return sign + number(float(f"{abs(value):.2g}"))
