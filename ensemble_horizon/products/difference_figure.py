"""Differences of scores by lead, place by place: which version errs less, and from when to when."""

from __future__ import annotations

import os
from collections.abc import Sequence
from pathlib import Path

import numpy as np
import xarray as xr
from matplotlib.axes import Axes
from matplotlib.ticker import FuncFormatter, MaxNLocator

from ensemble_horizon.products.curve_panel import lead_locator
from ensemble_horizon.products.gains import starts_words
from ensemble_horizon.products.gains_figure import FURTHER_A, FURTHER_B, UNTOLD
from ensemble_horizon.products.score_panel import plural
from ensemble_horizon.products.sheet import DPI, FAINT, INK, SOFT_INK, Sheet, line_height, wrapped
from ensemble_horizon.products.wording import (
    duration,
    interval_name,
    lead_number,
    lead_units,
    number,
)
from ensemble_horizon.serial import Reason
from ensemble_horizon.vocabulary import CAUTION, LEAD, PLACE, SCORE

SOFTWARE = "Ensemble Horizon"
MOST_PANELS = 6
_WIDTH, _LONE, _HEIGHT = 330, 560, 138
_GAP, _MARGIN, _HEADING, _WORDS, _BETWEEN, _TICKS = 78, 70, 26, 50, 14, 30
_TOLD = 3  # stretches of leads named in words


def draw_differences(part: xr.Dataset, path: str | os.PathLike[str]) -> list[Path]:
    """Draw the differences of scores of one variable by lead as PNG, one panel for each place.

    A mark is the difference, a bar its interval; coloured and full where the versions are told
    apart at a false discovery rate of 10 %, hollow and grey where they are not. Above the line the
    first version errs less, below it the second one.

    Parameters
    ----------
    part : Dataset (score, lead, place)
    path : path
        The first picture; after six places a next one follows, with ``_2`` in its name.

    Returns
    -------
    list of pathlib.Path

    Raises
    ------
    ProductError
        If a picture cannot be written.
    """
    target = Path(path)
    written = []
    for count, first in enumerate(range(0, part.sizes[PLACE], MOST_PANELS), start=1):
        name = target if count == 1 else target.with_stem(f"{target.stem}_{count}")
        written.append(_draw_sheet(part.isel({PLACE: slice(first, first + MOST_PANELS)}), name))
    return written


def outcome_words(one: xr.Dataset) -> str:
    """Return what the differences of one score at one place say, in plain words.

    Parameters
    ----------
    one : Dataset (lead,)
    """
    difference, units = one["difference"].values, str(one.attrs["lead_units"])
    if not np.isfinite(difference).any():
        return "nothing to compare"
    if not np.isfinite(one["p_value"].values).any():
        if (np.nan_to_num(difference) == 0).all():
            return "no difference"
        few = (one["reason"].values == Reason.few_starts).any()
        return f"not judged, {'few starts' if few else 'the same at every start'}"
    stretches = _stretches(np.where(one["survives"].values, np.sign(difference), 0).astype(int))
    if not stretches:
        return "not told apart"
    names = {1: str(one.attrs["version_a"]), -1: str(one.attrs["version_b"])}
    told, before = [], 0
    for sign, first, last in stretches[:_TOLD]:
        who = "and" if sign == before else names[sign] if before else f"{names[sign]} errs less"
        told.append(f"{who} at {_span(one[LEAD].values[first : last + 1], units)}")
        before = sign
    more = len(stretches) - _TOLD
    rest = f", and {more} more stretch{'es' if more > 1 else ''}" if more > 0 else ""
    return ", ".join(told).replace(", and at", " and at") + rest


def _span(lead: np.ndarray, units: str) -> str:
    last = duration(float(lead[-1]), units).replace(" ", "\u00a0")
    return last if lead.size == 1 else f"{lead_number(float(lead[0]), units)}–{last}"


def _stretches(signs: np.ndarray) -> list[tuple[int, int, int]]:
    """Return neighbouring leads of one sign, zero left out: (sign, first, last)."""
    edges = np.flatnonzero(np.diff(signs)) + 1
    starts, ends = [0, *edges.tolist()], [*edges.tolist(), signs.size]
    return [(int(signs[a]), a, b - 1) for a, b in zip(starts, ends, strict=True) if signs[a]]


def _draw_sheet(part: xr.Dataset, path: Path) -> Path:
    about, places, scores = part.attrs, part.sizes[PLACE], part.sizes[SCORE]
    a, b = str(about["version_a"]), str(about["version_b"])
    columns = min(places, 3)
    rows = -(-places // columns)
    panel = _WIDTH if places > 1 else _LONE
    width = _MARGIN + columns * (panel + _GAP) - _GAP + 24
    room = width - 40
    title = wrapped(f"Which version errs less: {about['long_name']}", room, 13.5, bold=True)
    unit = lead_units(str(about["lead_units"]))
    words = f"{b} less {a}, start by start   ·   {starts_words(part)}   ·   lead in {unit}"
    subtitle = wrapped(words, room, 9, most=2)
    note = (
        f"Mark: mean difference over the starts; bar: {interval_name(about['confidence'])}, each "
        "lead by itself. Coloured where the versions are told apart at a false discovery rate of "
        "10\u00a0% among all leads, places, scores and variables; hollow where they are not. Each "
        "panel has a scale of its own. "
    )
    notes = wrapped(note, room, 7.5) + wrapped(CAUTION, room, 7.5)
    top = 16 + len(title) * line_height(13.5) + len(subtitle) * line_height(9) + 16
    each = _HEADING + scores * (_WORDS + _HEIGHT + _BETWEEN) - _BETWEEN + _TICKS
    foot = top + rows * each + (rows - 1) * 12 + 8
    sheet = Sheet(int(width), int(foot + len(notes) * line_height(7.5) + 12))
    sheet.text(20, 16, "\n".join(title), size=13.5, weight="bold")
    lower = 18 + len(title) * line_height(13.5)
    sheet.text(20, lower, "\n".join(subtitle), size=9, colour=SOFT_INK)
    for position in range(places):
        row, column = divmod(position, columns)
        corner = (_MARGIN + column * (panel + _GAP), top + row * (each + 12))
        _panel(sheet, part.isel({PLACE: position}), corner, panel)
    sheet.text(20, foot, "\n".join(notes), size=7.5, colour=SOFT_INK)
    return sheet.save(path, software=SOFTWARE)


def _panel(sheet: Sheet, place: xr.Dataset, corner: tuple[float, float], width: int) -> None:
    """Draw all scores of one place below each other."""
    left, upper = corner
    heading = f"{place[PLACE].values}, against {plural(str(place['against'].values))}"
    heading = wrapped(heading, width, 10.5, most=1, bold=True)[0]
    sheet.text(left, upper, heading, size=10.5, weight="bold")
    upper += _HEADING
    last = place.sizes[SCORE] - 1
    for row in range(place.sizes[SCORE]):
        one = place.isel({SCORE: row})
        units = shown_units(str(one["score_units"].values))
        name = f"{one['score_text'].values}{f', {units}' if units else ''}"
        sheet.text(left, upper, wrapped(name, width + 20, 8.5, most=1)[0], size=8.5)
        words = wrapped(outcome_words(one), width + 30, 7.8, most=2)
        sheet.text(left, upper + 16, "\n".join(words), size=7.8, colour=SOFT_INK)
        upper += _WORDS
        axes = sheet.axes(left, upper, width, _HEIGHT)
        _frame(axes, one, labels=row == last)
        _marks(axes, one, width)
        upper += _HEIGHT + _BETWEEN


def shown_units(units: str) -> str:
    """Return the units of a score as they stand in a figure.

    Examples
    --------
    >>> shown_units("K"), shown_units("(K)2"), shown_units("(m s-1)2"), shown_units("1")
    ('K', 'K²', '(m s-1)²', '')
    """
    if units in ("1", "(1)2"):
        return ""
    if not units.endswith(")2"):
        return units
    inner = units[1:-2]
    return f"{inner}²" if inner.isalpha() else f"({inner})²"


def _frame(axes: Axes, one: xr.Dataset, *, labels: bool) -> None:
    lead = one[LEAD].values.astype(float)
    first, last = float(lead[0]), float(lead[-1])
    margin = 0.02 * (last - first) or 0.5
    low, high = _ends(one)
    axes.set(xlim=(first - margin, last + margin), ylim=(low, high))
    axes.axhspan(0, high, color=FURTHER_A, alpha=0.055, linewidth=0, zorder=0)
    axes.axhspan(low, 0, color=FURTHER_B, alpha=0.055, linewidth=0, zorder=0)
    axes.xaxis.set_major_locator(lead_locator(first, last, str(one.attrs["lead_units"])))
    axes.tick_params(axis="x", labelbottom=labels)
    axes.yaxis.set_major_locator(MaxNLocator(4))
    axes.yaxis.set_major_formatter(FuncFormatter(lambda value, _: _signed(value)))
    axes.grid(color=FAINT, linewidth=0.6)
    axes.set_axisbelow(True)
    axes.axhline(0, color=INK, linewidth=1.1, zorder=2)
    for key, colour, y, arrow in (
        ("version_a", FURTHER_A, 0.95, "↑"), ("version_b", FURTHER_B, 0.05, "↓"),
    ):  # fmt: skip
        name = wrapped(str(one.attrs[key]), 150, 7.5, most=1)[0]
        axes.text(
            0.014, y, f"{arrow} {name} errs less", transform=axes.transAxes, fontsize=7.5,
            color=colour, va="top" if y > 0.5 else "bottom", zorder=6, parse_math=False,
        )  # fmt: skip


def _signed(value: float) -> str:
    """Return a tick with its sign; what rounding left of zero is zero."""
    words = number(abs(value)) if abs(value) > 1e-12 else "0"
    return words if words == "0" else f"{'+' if value > 0 else '−'}{words}"


def _ends(one: xr.Dataset) -> tuple[float, float]:
    """Return the ends of the axis: no difference is on it, with room for words on both sides."""
    values = [one[key].values for key in ("difference", "difference_low", "difference_high")]
    known = np.concatenate(values)
    known = known[np.isfinite(known)]
    low, high = min(known.min(initial=0.0), 0.0), max(known.max(initial=0.0), 0.0)
    wide = high - low or 1.0
    return float(min(low - 0.24 * wide, -0.3 * wide)), float(max(high + 0.24 * wide, 0.3 * wide))


def _marks(axes: Axes, one: xr.Dataset, width: int) -> None:
    """Draw the differences with their intervals, each lead in the colour of who errs less."""
    lead, difference = one[LEAD].values.astype(float), one["difference"].values
    survives = one["survives"].values.astype(bool)
    step = width / max(lead.size, 1) * 72 / DPI
    axes.plot(lead, difference, color=UNTOLD, linewidth=1.0, zorder=3)
    kinds: Sequence[tuple[np.ndarray, str, bool]] = (
        (~survives, UNTOLD, False),
        (survives & (difference > 0), FURTHER_A, True),
        (survives & (difference < 0), FURTHER_B, True),
    )
    for chosen, colour, full in kinds:
        axes.vlines(
            lead[chosen], one["difference_low"].values[chosen],
            one["difference_high"].values[chosen], color=colour, alpha=0.5,
            linewidth=float(np.clip(0.45 * step, 0.8, 3.2)), zorder=3,
        )  # fmt: skip
        axes.plot(
            lead[chosen], difference[chosen], "D", color=colour,
            markerfacecolor=colour if full else "white", markeredgewidth=0.9,
            markersize=float(np.clip(0.55 * step, 2.0, 4.6)), zorder=4,
        )  # fmt: skip
