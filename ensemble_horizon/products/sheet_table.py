"""The limits of one start as rows on paper: the shortest first, with what is usual."""

from __future__ import annotations

import re
from collections.abc import Sequence
from dataclasses import dataclass, replace
from typing import TYPE_CHECKING

import numpy as np

from ensemble_horizon.products.fitted_text import broken, drawable, shortened, text_width
from ensemble_horizon.products.limits import Limit
from ensemble_horizon.products.page.standing import (
    at_edge,
    rank_words,
    standing_name,
    unknown_because,
)
from ensemble_horizon.products.paper import MARGIN, WIDTH, Paper
from ensemble_horizon.products.sheet import INK, SOFT_INK, line_height
from ensemble_horizon.products.tables import criterion_parts, criterion_text
from ensemble_horizon.products.wording import duration, horizon_text, lead_number, lead_units
from ensemble_horizon.vocabulary import Status

if TYPE_CHECKING:
    from ensemble_horizon.horizon.usual import Usual

ROW, HEADING = 18, 24
SHORTER, LONGER = "#8a2517", "#0f6158"
_TONES = {"shorter": SHORTER, "longer": LONGER}
_SIZE, _HEADING_SIZE, _GAP = 8.0, 7.5, 10
_BREAK = re.compile(" (?=than )")  # where tonight's place breaks into two lines
_STRIPE = "#f5f6f4"
_CRITERION, _NAMES, _LIMIT, _STANDING = 2, 3, 3, 6  # where they stand; three columns are names


@dataclass(frozen=True)
class Row:
    """One limit in short; ``interval`` is empty where ``limit`` takes its room too."""

    limit: str
    interval: str
    usual: str
    standing: str
    tone: str


def row_of(limit: Limit, usual: Usual | None) -> Row:
    """Return a limit and what is usual of it, each in as few words as will do."""
    units, last = limit.horizon_units, f"> {lead_number(limit.last_lead, limit.horizon_units)}"
    if limit.status == Status.reached:
        words, between = duration(limit.horizon, units), _between(limit, last)
    elif limit.status == Status.beyond_run:
        words = f"{last} {lead_units(units)}"
        early = np.isfinite(limit.low)
        between = f"perhaps from {duration(limit.low, units)}" if early else "beyond the run"
    else:
        none = float("nan")
        words = horizon_text(limit.status, none, none, none, none, limit.last_lead, units)
        between = ""
    if usual is None or np.isnan(usual.median):
        why = "" if usual is None else unknown_because(usual).removesuffix(" nights needed")
        return Row(words, between, f"{why} nights" if why else "not known", "", SOFT_INK)
    ends = [
        lead_number(value, units) if np.isfinite(value) else last
        for value in (usual.median, usual.low, usual.high)
    ]
    known = f"{ends[0]} ({ends[1]} to {ends[2]})"
    name = standing_name(usual, limit)
    if name == "unknown":
        return Row(words, between, known, "", SOFT_INK)
    if name == "usual":
        told = "at the edge" if at_edge(usual, limit) else "as usual"
        return Row(words, between, known, told, SOFT_INK)
    rank = rank_words(usual, short=True).removesuffix(" past nights")
    told = rank if rank.startswith(name) else name
    if usual.within(limit.low, limit.high):
        # The interval reaches into the usual: not to be shouted.
        return Row(words, between, known, f"perhaps {told}", SOFT_INK)
    return Row(words, between, known, told, _TONES.get(name, SOFT_INK))


@dataclass(frozen=True)
class TablePlan:
    """A table set out: where its columns begin, and the lines of each cell."""

    headings: tuple[str, ...]
    lefts: tuple[float, ...]
    rows: tuple[Row, ...]
    cells: tuple[tuple[list[str], ...], ...]

    @property
    def heights(self) -> list[float]:
        """Height of each row in pixels."""
        return [
            ROW + (max(len(lines) for lines in cells) - 1) * line_height(_SIZE)
            for cells in self.cells
        ]

    @property
    def height(self) -> float:
        """Height of the table in pixels, its heading included."""
        return HEADING + sum(self.heights)

    def rows_that_fit(self, room: float) -> int:
        """Return how many rows to show; the line that tells of the others takes one."""
        if self.height <= room:
            return len(self.rows)
        ends = HEADING + np.cumsum(self.heights)
        return max(int(np.count_nonzero(ends <= room - ROW)), 1)


def plan_table(
    limits: Sequence[Limit], usual: Sequence[Usual | None], interval: str, *, most: int = 1
) -> TablePlan:
    """Set out a row for each of ``limits`` over the whole width of the page.

    Parameters
    ----------
    limits : sequence of Limit
        In the order to show them.
    usual : sequence of Usual or None
        One for each limit; the columns are left out where all are None.
    interval : str
        Name of the interval, such as ``90 % interval``.
    most : int
        Lines that a name may take; what does not fit is cut, but never a threshold.
    """
    compared = any(item is not None for item in usual)
    headings = ["place", "variable", "criterion", "limit", interval]
    if compared:
        headings += ["usual (10 to 90 %)", "past nights"]
    rows = [row_of(limit, known) for limit, known in zip(limits, usual, strict=True)]
    if most == 1:
        # Names need the room more: which of the past nights were longer stands on the page.
        rows = [replace(row, standing=_BREAK.split(row.standing)[0]) for row in rows]
    texts = [_texts(limit, row)[: len(headings)] for limit, row in zip(limits, rows, strict=True)]
    lefts = _lefts(headings, texts, most)
    cells = [
        tuple(_lines(limit, row, column, words, lefts, most) for column, words in enumerate(line))
        for limit, row, line in zip(limits, rows, texts, strict=True)
    ]
    return TablePlan(tuple(headings), tuple(lefts), tuple(rows), tuple(cells))


def draw_table(paper: Paper, top: float, plan: TablePlan) -> None:
    """Draw the heading and all rows, the upper edge at ``top`` pixels."""
    lefts = plan.lefts
    for column, words in enumerate(plan.headings):
        room = lefts[column + 1] - lefts[column] - _GAP
        short = shortened(words, room, _HEADING_SIZE)
        paper.text(lefts[column], top, short, size=_HEADING_SIZE, colour=SOFT_INK)
    paper.rule(top + HEADING - 6)
    upper = top + HEADING
    for position, (row, cells) in enumerate(zip(plan.rows, plan.cells, strict=True)):
        height = plan.heights[position]
        if position % 2:
            paper.area((MARGIN - 6, upper - 3, WIDTH - 2 * MARGIN + 12, height), _STRIPE)
        for column, lines in enumerate(cells):
            colour = INK if column <= _LIMIT else SOFT_INK
            paper.lines(
                lefts[column],
                upper,
                lines,
                size=_SIZE,
                weight="bold" if _is_bold(column, row) else "normal",
                colour=row.tone if column == _STANDING else colour,
            )
        upper += height


def fitted_criterion(limit: Limit, room: float, size: float, *, most: int = 1) -> list[str]:
    """Return a criterion in lines that fit ``room`` pixels; its name is cut before its size is."""
    name, threshold = criterion_parts(limit)
    lines = broken(criterion_text(limit), room, size, most=most)
    if not lines or not lines[-1].endswith("…"):
        return lines
    chance = limit.criterion_kind == "chance" and bool(limit.rule)
    # A chance told in words takes room: its short form has both of its numbers.
    short = f"{limit.rule} {limit.units}" if chance else threshold
    if not threshold:
        return broken(short or criterion_text(limit), room, size, most=most)
    behind = f"({short})"
    if most > 1:
        return [*broken(name, room, size, most=most - 1), shortened(behind, room, size)]
    left = room - text_width(f" {drawable(behind)}", size)
    head = shortened(name, left, size) if left > text_width("…", size) else ""
    return [shortened(f"{head} {behind}".strip(), room, size)]


def _lines(
    limit: Limit, row: Row, column: int, words: str, lefts: Sequence[float], most: int
) -> list[str]:
    """The lines of one cell."""
    end = column + (2 if column == _LIMIT and not row.interval else 1)
    room = lefts[end] - lefts[column] - _GAP
    if column == _CRITERION:
        return fitted_criterion(limit, room, _SIZE, most=most)
    if column < _NAMES or column == _STANDING:
        return broken(words, room, _SIZE, most=most, bold=_is_bold(column, row))
    return [shortened(words, room, _SIZE, bold=_is_bold(column, row))]


def _texts(limit: Limit, row: Row) -> list[str]:
    names = [limit.place, limit.long_name, criterion_text(limit)]
    return [*names, row.limit, row.interval, row.usual, row.standing]


def _is_bold(column: int, row: Row) -> bool:
    return column == _LIMIT or (column == _STANDING and row.tone != SOFT_INK)


def _between(limit: Limit, last: str) -> str:
    """Return the interval of a limit within the run, ``> 240`` for an end beyond it."""
    if not np.isfinite(limit.low) and np.isnan(limit.high):
        return ""
    units = limit.horizon_units
    low = lead_number(limit.low, units) if np.isfinite(limit.low) else "the start"
    high = lead_number(limit.high, units) if np.isfinite(limit.high) else last
    return f"{low} to {high} {lead_units(units)}"


def _lefts(headings: Sequence[str], cells: Sequence[Sequence[str]], most: int) -> list[float]:
    """Return where the columns begin, and where the last one ends.

    Numbers have the room they need; names share what is left, and those that need less than an
    equal share leave it to the others.
    """
    needs, spare = [], _GAP + 1  # a pixel, for sums that are rounded
    for column, heading in enumerate(headings):
        texts = [row[column] for row in cells if column != _LIMIT or row[_LIMIT + 1]]
        if column == _STANDING and most > 1:
            texts = [part for words in texts for part in _BREAK.split(words)]
        bold = column in (_LIMIT, _STANDING)
        widest = max((text_width(drawable(words), _SIZE, bold=bold) for words in texts), default=0)
        needs.append(max(widest, text_width(heading, _HEADING_SIZE)) + spare)
    spanning = [row[_LIMIT] for row in cells if not row[_LIMIT + 1]]
    widest = max((text_width(words, _SIZE, bold=True) for words in spanning), default=0) + spare
    needs[_LIMIT + 1] = max(needs[_LIMIT + 1], widest - needs[_LIMIT])
    widths = [*_shared(needs[:_NAMES], WIDTH - 2 * MARGIN - sum(needs[_NAMES:])), *needs[_NAMES:]]
    return [float(MARGIN + sum(widths[:column])) for column in range(len(widths) + 1)]


def _shared(needs: Sequence[float], room: float) -> list[float]:
    """Share ``room`` out: to each what it needs, if need be less to those that need most."""
    if sum(needs) <= room:
        return [need + (room - sum(needs)) / len(needs) for need in needs]
    widths = dict.fromkeys(range(len(needs)), 0.0)
    left = room
    for rank, column in enumerate(sorted(widths, key=lambda column: needs[column])):
        widths[column] = min(needs[column], left / (len(needs) - rank))
        left -= widths[column]
    return [widths[column] for column in range(len(needs))]
