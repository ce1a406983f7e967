"""The limits of one start as rows on paper: the shortest first, with what is usual."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from ensemble_horizon.products.fitted_text import drawable, shortened, text_width
from ensemble_horizon.products.limits import Limit
from ensemble_horizon.products.page.standing import standing_name
from ensemble_horizon.products.paper import MARGIN, WIDTH, Paper
from ensemble_horizon.products.sheet import INK, SOFT_INK
from ensemble_horizon.products.tables import criterion_text
from ensemble_horizon.products.wording import duration, horizon_text, lead_number, lead_units
from ensemble_horizon.vocabulary import Status

if TYPE_CHECKING:
    from ensemble_horizon.horizon.usual import Usual

ROW, HEADING = 18, 24
SHORTER, LONGER = "#8a2517", "#0f6158"
_TONES = {"shorter": SHORTER, "longer": LONGER}
_SIZE, _HEADING_SIZE, _GAP = 8.0, 7.5, 10
_STRIPE = "#f5f6f4"
_NAMES, _LIMIT, _STANDING = 3, 3, 6  # how many columns are names; where limit and standing stand


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
        return Row(words, between, "not known", "", SOFT_INK)
    ends = [
        lead_number(value, units) if np.isfinite(value) else last
        for value in (usual.median, usual.low, usual.high)
    ]
    known = f"{ends[0]} ({ends[1]} to {ends[2]})"
    name = standing_name(usual)
    if name == "unknown":
        return Row(words, between, known, "", SOFT_INK)
    rank = "" if np.isnan(usual.percentile) else f"{usual.percentile:.0f}, "
    tone = _TONES.get(name, SOFT_INK)
    return Row(words, between, known, f"{rank}{'as ' if name == 'usual' else ''}{name}", tone)


def table_height(count: int) -> int:
    """Return the height of a table of ``count`` rows in pixels, its heading included."""
    return HEADING + ROW * count


def draw_table(
    paper: Paper,
    top: float,
    limits: Sequence[Limit],
    usual: Sequence[Usual | None],
    interval: str,
) -> None:
    """Draw the heading and a row for each of ``limits`` over the whole width of the page.

    Parameters
    ----------
    paper : Paper
    top : float
        Upper edge in pixels.
    limits : sequence of Limit
        In the order to show them.
    usual : sequence of Usual or None
        One for each limit; the columns are left out where all are None.
    interval : str
        Name of the interval, such as ``90 % interval``.
    """
    compared = any(item is not None for item in usual)
    headings = ["place", "variable", "criterion", "limit", interval]
    if compared:
        headings += ["usual (10 to 90 %)", "percentile"]
    rows = [row_of(limit, known) for limit, known in zip(limits, usual, strict=True)]
    cells = [_cells(limit, row)[: len(headings)] for limit, row in zip(limits, rows, strict=True)]
    lefts = _lefts(headings, cells)
    for column, words in enumerate(headings):
        room = lefts[column + 1] - lefts[column] - _GAP
        short = shortened(words, room, _HEADING_SIZE)
        paper.text(lefts[column], top, short, size=_HEADING_SIZE, colour=SOFT_INK)
    paper.rule(top + HEADING - 6)
    for position, (row, texts) in enumerate(zip(rows, cells, strict=True)):
        upper = top + HEADING + ROW * position
        if position % 2:
            paper.area((MARGIN - 6, upper - 3, WIDTH - 2 * MARGIN + 12, ROW), _STRIPE)
        for column, words in enumerate(texts):
            end = column + (2 if column == _LIMIT and not row.interval else 1)
            bold = _is_bold(column, row)
            room = lefts[end] - lefts[column] - _GAP
            paper.text(
                lefts[column],
                upper,
                shortened(words, room, _SIZE, bold=bold),
                size=_SIZE,
                weight="bold" if bold else "normal",
                colour=row.tone if column == _STANDING else INK if column <= _LIMIT else SOFT_INK,
            )


def _cells(limit: Limit, row: Row) -> list[str]:
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


def _lefts(headings: Sequence[str], cells: Sequence[Sequence[str]]) -> list[float]:
    """Return where the columns begin, and where the last one ends.

    Numbers have the room they need; names share what is left, and those that need less than an
    equal share leave it to the others.
    """
    needs, spare = [], _GAP + 1  # a pixel, for sums that are rounded
    for column, heading in enumerate(headings):
        texts = [row[column] for row in cells if column != _LIMIT or row[_LIMIT + 1]]
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
