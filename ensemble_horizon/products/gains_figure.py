"""The picture of a comparison that is read in a minute: hours gained with intervals, row by row."""

from __future__ import annotations

import os
from collections.abc import Sequence
from pathlib import Path

import numpy as np
import xarray as xr
from matplotlib.axes import Axes
from matplotlib.ticker import FuncFormatter, MaxNLocator

from ensemble_horizon.products.gains import Gain, gains, starts_words, summary_words
from ensemble_horizon.products.sheet import (
    DPI,
    FAINT,
    INK,
    LETTER,
    SOFT_INK,
    Sheet,
    line_height,
    wrapped,
)
from ensemble_horizon.products.wording import interval_name, lead_number, lead_units, signed
from ensemble_horizon.vocabulary import CAUTION

SOFTWARE = "Ensemble Horizon"
# Told apart by lightness as well as by hue.
FURTHER_A, FURTHER_B, UNTOLD = "#c2592a", "#0f6158", "#8a949b"
MOST_ROWS = 36
_ROW, _HEADING = 23, 27
_LABELS, _PLOT, _NUMBERS, _MARGIN = 330, 400, 300, 20


def draw_gains(tables: Sequence[xr.Dataset], path: str | os.PathLike[str]) -> list[Path]:
    """Draw the hours gained of all variables, places and criteria as PNG.

    A mark is the gain, a bar its interval; coloured and full where the versions are told apart at
    a false discovery rate of 10 %, hollow and grey where they are not.

    Parameters
    ----------
    tables : sequence of Dataset
        The ``places`` of each variable.
    path : path
        The first picture; after 36 rows a next one follows, with ``_2`` in its name.

    Returns
    -------
    list of pathlib.Path

    Raises
    ------
    ProductError
        If a picture cannot be written.
    """
    rows = gains(tables)
    places = tables[0]
    head = (starts_words(places), summary_words(rows), interval_name(places.attrs["confidence"]))
    ends = _ends(rows)
    target = Path(path)
    written = []
    for number, first in enumerate(range(0, len(rows), MOST_ROWS), start=1):
        name = target if number == 1 else target.with_stem(f"{target.stem}_{number}")
        written.append(_draw_sheet(rows[first : first + MOST_ROWS], head, ends, name))
    return written


def _draw_sheet(
    rows: Sequence[Gain], head: tuple[str, str, str], ends: tuple[float, float], path: Path
) -> Path:
    first = rows[0]
    width = _MARGIN + _LABELS + _PLOT + _NUMBERS + _MARGIN
    room = width - 2 * _MARGIN
    words = f"Lead time gained by {first.version_b} over {first.version_a}"
    title = wrapped(words, room, 13.5, most=2, bold=True)
    outcome = wrapped(head[1], room, 10, most=2)
    subtitle = wrapped(head[0], room, 9, most=2)
    end = f"{lead_number(first.counted_to, first.units)} {lead_units(first.units)}"
    note = (
        f"Mark: mean gain over the starts, each horizon counted up to {end}; bar: {head[2]}. "
        "Coloured where the versions are told apart at a false discovery rate of 10\u00a0%; hollow "
        "where they are not. Limits rest on the spread of the members, not on errors."
    )
    notes = wrapped(note, room, 7.5) + wrapped(CAUTION, room, 7.5)
    tops, bottom = _positions(rows)
    top = 16 + len(title) * line_height(13.5) + len(outcome) * line_height(10)
    top += len(subtitle) * line_height(9) + 42
    height = top + bottom + 46 + len(notes) * line_height(7.5) + 12
    sheet = Sheet(width, int(height))
    y = 16.0
    for lines, size, weight, colour in (
        (title, 13.5, "bold", INK), (outcome, 10, "normal", INK), (subtitle, 9, "normal", SOFT_INK),
    ):  # fmt: skip
        sheet.text(_MARGIN, y, "\n".join(lines), size=size, weight=weight, colour=colour)
        y += len(lines) * line_height(size) + 2
    left = _MARGIN + _LABELS
    axes = sheet.axes(left, top, _PLOT, bottom)
    _frame(axes, ends, bottom, first.units)
    _sides(sheet, first, ends, left, top - 20)
    numbers = left + _PLOT + 14
    sheet.text(
        numbers, top - 20, f"{first.version_a} → {first.version_b}"[:14], size=8, colour=SOFT_INK
    )
    sheet.text(numbers + 100, top - 20, "gained", size=8, colour=SOFT_INK)
    previous = ""
    for row, middle in zip(rows, tops, strict=True):
        if row.variable != previous:
            words = wrapped(row.long_name, _LABELS, 9.5, most=1, bold=True)[0]
            sheet.text(_MARGIN, top + middle - _ROW - 4, words, size=9.5, weight="bold")
            previous = row.variable
        _row(sheet, axes, row, top + middle, middle, numbers)
    sheet.text(_MARGIN, top + bottom + 42, "\n".join(notes), size=7.5, colour=SOFT_INK)
    return sheet.save(path, software=SOFTWARE)


def _positions(rows: Sequence[Gain]) -> tuple[list[float], float]:
    """Return the middle of each row in pixels below the upper edge of the axes, and the lower."""
    y, middles, previous = 0.0, [], ""
    for row in rows:
        if row.variable != previous:
            y += _HEADING
            previous = row.variable
        middles.append(y + _ROW / 2)
        y += _ROW
    return middles, y + 5


def _row(sheet: Sheet, axes: Axes, row: Gain, y: float, inside: float, numbers: float) -> None:
    """Write and draw one row with its middle at ``y`` pixels, ``inside`` pixels in the axes."""
    sheet.text(_MARGIN + 10, y - 7, _label(row), size=8.5)
    bold = "bold" if row.survives else "normal"
    colour = colour_of(row)
    if np.isfinite(row.gained):
        if np.isfinite(row.low):
            bar = [row.low, row.high]
            axes.plot(bar, [inside] * 2, color=colour, linewidth=3.2, alpha=0.55, zorder=3)
        face = colour if row.survives else "white"
        axes.plot(
            row.gained, inside, "D", color=colour, markerfacecolor=face, markersize=5.4, zorder=4
        )
        means = [lead_number(mean, row.units) for mean in (row.horizon_a, row.horizon_b)]
        sheet.text(numbers, y - 7, " → ".join(means), size=8.5, colour=SOFT_INK)
    tone = colour if row.survives else INK
    sheet.text(numbers + 100, y - 7, row.text, size=8.5, weight=bold, colour=tone)


def _label(row: Gain) -> str:
    """Return place and criterion; a long place is cut, so that the criterion can be read."""
    room, letter = _LABELS - 24, LETTER * 8.5 * DPI / 72
    criterion = wrapped(row.criterion_text, 0.6 * room, 8.5, most=1)[0]
    place = wrapped(row.place, room - (len(criterion) + 2) * letter, 8.5, most=1)[0]
    return f"{place}, {criterion}"


def colour_of(row: Gain) -> str:
    """Return the colour of the version that holds longer, grey where that cannot be told."""
    if not row.survives:
        return UNTOLD
    return FURTHER_B if row.gained > 0 else FURTHER_A


def _ends(rows: Sequence[Gain]) -> tuple[float, float]:
    """Return the ends of the axis of all sheets: no gain is always on it."""
    values = np.array([[row.gained, row.low, row.high] for row in rows])
    known = values[np.isfinite(values)]
    low, high = min(known.min(initial=0.0), 0.0), max(known.max(initial=0.0), 0.0)
    wide = high - low or 2.0
    return float(low - 0.14 * wide), float(high + 0.14 * wide)


def _frame(axes: Axes, ends: tuple[float, float], height: float, units: str) -> None:
    axes.set(xlim=ends, ylim=(height, 0))
    axes.set_yticks([])
    axes.set_facecolor("#f7f8f6")
    axes.xaxis.set_major_locator(MaxNLocator(7))
    axes.xaxis.set_major_formatter(FuncFormatter(lambda value, _: signed(value, units)))
    axes.grid(axis="x", color=FAINT, linewidth=0.6)
    axes.set_axisbelow(True)
    axes.axvline(0, color=INK, linewidth=1.1, zorder=2)
    axes.set_xlabel(lead_units(units), fontsize=8, color=SOFT_INK, labelpad=1)


def _sides(sheet: Sheet, row: Gain, ends: tuple[float, float], left: float, top: float) -> None:
    """Say which side of no gain speaks for which version."""
    zero = left + _PLOT * -ends[0] / (ends[1] - ends[0])
    for name, x, align, arrow in (
        (row.version_a, zero - 8, "right", "← {} holds longer"),
        (row.version_b, zero + 8, "left", "{} holds longer →"),
    ):
        space = x - left if align == "right" else left + _PLOT - x
        text = arrow.format(name)
        if len(text) * 7.2 < space:
            sheet.text(x, top, text, size=8, colour=SOFT_INK, align=align)
