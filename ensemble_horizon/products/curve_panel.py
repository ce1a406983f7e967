"""One panel of growth curves: the spread, its law, the chance, and a strip of limits below."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import xarray as xr
from matplotlib.axes import Axes
from matplotlib.ticker import (
    FixedLocator,
    FuncFormatter,
    Locator,
    LogLocator,
    MaxNLocator,
    NullLocator,
)

from ensemble_horizon.products.limits import Limit
from ensemble_horizon.products.sheet import DPI, FAINT, INK, LETTER, SOFT_INK, Sheet, wrapped
from ensemble_horizon.products.wording import duration, interval, lead_units, number
from ensemble_horizon.vocabulary import LEAD, Status

# Told apart by lightness as well as by hue.
CRITERION_COLOURS = ("#b5481b", "#54308a", "#14796f", "#8f7a00", "#b03a78", "#3c4a52")
BAND, LAW_INK = "#cfdbe3", "#5f7f95"
CURVE_HEIGHT, CHANCE_HEIGHT, ROW_HEIGHT = 176, 74, 19
TITLE_HEIGHT, TICKS_HEIGHT, CHANCE_GAP = 44, 34, 15
_LOG_FROM = 30.0
_LEAD_STEPS = (1, 2, 3, 6, 12, 24, 48, 72, 96, 120, 240, 480, 960)
_LETTER_OF_STRIP = 7.5 * DPI / 72 * 1.06 * LETTER


@dataclass(frozen=True)
class Panel:
    """What one panel shows: the curves of one start and place, and their limits."""

    curves: xr.Dataset
    limits: list[Limit]
    width: int
    with_chance: bool

    @property
    def height(self) -> int:
        """Height in pixels, titles and tick labels included."""
        chance = CHANCE_HEIGHT + CHANCE_GAP if self.with_chance else 0
        strip = ROW_HEIGHT * len(self.limits) + 6
        return TITLE_HEIGHT + CURVE_HEIGHT + chance + strip + TICKS_HEIGHT

    def values(self, name: str) -> np.ndarray:
        """Return a curve over lead, NaN where the dataset has none."""
        if name not in self.curves:
            return np.full(self.curves.sizes[LEAD], np.nan)
        return np.asarray(self.curves[name].values, dtype=float)

    def single(self, name: str) -> float:
        """Return a single number of the fit, NaN where the dataset has none."""
        return float(self.curves[name].values) if name in self.curves else float("nan")


def lead_locator(first: float, last: float, units: str) -> Locator:
    """Return where an axis of leads has its ticks: on whole parts of days where it counts hours."""
    if lead_units(units) != "h":
        return MaxNLocator(6)
    fitting = [step for step in _LEAD_STEPS if (last - first) / step <= 8]
    step = fitting[0] if fitting else _LEAD_STEPS[-1]
    ticks = np.arange(np.ceil(first / step), last / step + 1e-9) * step
    return FixedLocator(ticks.tolist())


def draw_panel(sheet: Sheet, panel: Panel, left: float, top: float) -> None:
    """Draw one panel with its upper left corner at ``left``, ``top`` pixels."""
    first = panel.limits[0]
    title = wrapped(first.place, panel.width, 10.5, most=1, bold=True)[0]
    sheet.text(left, top, title, size=10.5, weight="bold")
    note = wrapped(fit_note(panel), panel.width + 40, 7.8, most=1)[0]
    sheet.text(left, top + 21, note, size=7.8, colour=SOFT_INK)
    upper = top + TITLE_HEIGHT
    axes = sheet.axes(left, upper, panel.width, CURVE_HEIGHT)
    _spread(axes, panel)
    upper += CURVE_HEIGHT
    if panel.with_chance:
        upper += CHANCE_GAP
        _chance(sheet.axes(left, upper, panel.width, CHANCE_HEIGHT), panel)
        upper += CHANCE_HEIGHT
    strip = sheet.axes(left, upper + 6, panel.width, ROW_HEIGHT * len(panel.limits))
    _strip(strip, panel)


def fit_note(panel: Panel) -> str:
    """Return the line below the title: doubling time with interval, law, members."""
    first = panel.limits[0]
    parts = []
    if np.isfinite(first.doubling_time):
        ends = (panel.single("doubling_time_low"), panel.single("doubling_time_high"))
        band = interval(*ends, first.horizon_units) if np.isfinite(ends).all() else ""
        parts.append(f"doubles in {duration(first.doubling_time, first.horizon_units)} {band}")
    if first.law:
        parts.append("no law fitted" if first.law == "none" else f"{first.law} law")
    if first.members is not None:
        parts.append(f"{first.members} members")
    return " · ".join(part.strip() for part in parts) or "no law fitted"


def is_logarithmic(spread: np.ndarray) -> bool:
    """Whether a spread grows so far that its axis has equal steps for equal ratios."""
    known = spread[np.isfinite(spread) & (spread > 0)]
    return bool(known.size > 2 and known.max() / known.min() >= _LOG_FROM)


def level_on_curve(limit: Limit, units: str, saturation: float) -> float:
    """Return the height of a criterion on the axis of the spread; NaN where it has none there."""
    if "chance" in limit.criterion_kind:
        return float("nan")
    if limit.threshold_units == units:
        return limit.threshold
    if "fraction" in limit.criterion_kind and limit.threshold_units in ("", "1"):
        return limit.threshold * saturation
    return float("nan")


def colour_of(position: int) -> str:
    """Return the colour of a criterion by its position."""
    return CRITERION_COLOURS[position % len(CRITERION_COLOURS)]


def _spread(axes: Axes, panel: Panel) -> None:
    lead = np.asarray(panel.curves[LEAD].values, dtype=float)
    spread, fitted = panel.values("spread"), panel.values("fitted")
    low, high = panel.values("spread_low"), panel.values("spread_high")
    _lead_axis(axes, panel, labels=False)
    axes.grid(color=FAINT, linewidth=0.6)
    axes.set_axisbelow(True)
    if not np.isfinite(spread).any():
        axes.set_yticks([])
        words = "no curve: too little known"
        axes.text(
            0.5, 0.5, words, transform=axes.transAxes, ha="center", fontsize=9, color=SOFT_INK
        )
        return
    units = str(panel.curves.attrs.get("units", "1"))
    levels = [level_on_curve(limit, units, panel.single("saturation")) for limit in panel.limits]
    logarithmic = is_logarithmic(spread)
    axes.fill_between(lead, low, high, color=BAND, linewidth=0, zorder=1)
    axes.plot(lead, fitted, color=LAW_INK, linewidth=1.5, linestyle=(0, (4, 2)), zorder=3)
    axes.plot(lead, spread, color=INK, linewidth=1.7, zorder=4)
    shown = np.concatenate([spread, low, high])
    shown = shown[np.isfinite(shown) & ((shown > 0) if logarithmic else True)]
    top = float(shown.max())
    top = max([top, *(level for level in levels if level <= 3 * top)])
    if logarithmic:
        axes.set_yscale("log")
        axes.set_ylim(float(shown.min()) / 1.25, top * 1.35)
        axes.yaxis.set_major_locator(LogLocator(subs=(1.0, 2.0, 5.0), numticks=8))
        axes.yaxis.set_minor_locator(NullLocator())
    else:
        axes.set_ylim(0, top * 1.08 or 1.0)
        axes.yaxis.set_major_locator(MaxNLocator(5))
    axes.yaxis.set_major_formatter(FuncFormatter(lambda value, _: number(value)))
    bottom = axes.get_ylim()[0]
    for position, (limit, level) in enumerate(zip(panel.limits, levels, strict=True)):
        if not np.isfinite(level) or level > axes.get_ylim()[1]:
            continue
        axes.axhline(level, color=colour_of(position), linewidth=1.0, zorder=2)
        if limit.status == Status.reached:
            _drop(axes, limit.horizon, bottom, level, position)


def _chance(axes: Axes, panel: Panel) -> None:
    lead = np.asarray(panel.curves[LEAD].values, dtype=float)
    _lead_axis(axes, panel, labels=False)
    axes.set_ylim(0, 1)
    axes.set_yticks([0, 0.5, 1], ["0", "50 %", "100 %"])
    axes.grid(color=FAINT, linewidth=0.6)
    axes.set_axisbelow(True)
    drawn = False
    for position, limit in enumerate(panel.limits):
        chance = np.asarray(panel.curves["chance"].values[limit.index[2]], dtype=float)
        if not np.isfinite(chance).any():
            continue
        drawn = True
        axes.plot(lead, chance, color=colour_of(position), linewidth=1.5, zorder=3)
        axes.axhline(limit.threshold, color=colour_of(position), linewidth=1.0, zorder=2)
        if limit.status == Status.reached:
            _drop(axes, limit.horizon, 0.0, limit.threshold, position)
    words = "chance" if drawn else "no chance: too little known"
    axes.text(0.012, 0.9, words, transform=axes.transAxes, va="top", fontsize=7.5, color=SOFT_INK)


def _drop(axes: Axes, lead: float, bottom: float, level: float, position: int) -> None:
    """Draw the line that falls from a crossing to the strip of limits."""
    axes.plot([lead, lead], [bottom, level], color=colour_of(position), linewidth=1.0, zorder=3)
    axes.plot(lead, level, "o", color=colour_of(position), markersize=3.6, zorder=5)


def _strip(axes: Axes, panel: Panel) -> None:
    """Draw the limits: a bar for the interval, a mark for the limit, words beside it."""
    _lead_axis(axes, panel, labels=True)
    axes.set_ylim(len(panel.limits) - 0.5, -0.5)
    axes.set_yticks([])
    axes.set_facecolor("#f5f6f4")
    first, last = axes.get_xlim()
    letter = _LETTER_OF_STRIP / panel.width * (last - first)
    for position, limit in enumerate(panel.limits):
        colour = colour_of(position)
        words = limit.text
        veil: dict[str, str] | None = None
        if limit.status == Status.reached:
            low = limit.low if np.isfinite(limit.low) else limit.horizon
            high = limit.high if not np.isnan(limit.high) else limit.horizon
            end = min(high, last)
            bar, row = [low, end], [position, position]
            axes.plot(bar, row, color=colour, linewidth=4.5, alpha=0.4, solid_capstyle="butt")
            axes.plot(limit.horizon, position, "D", color=colour, markersize=4.8)
            if high > last:
                axes.plot(last, position, ">", color=colour, markersize=6, clip_on=False)
            right = end + 1.5 * letter
            left = low - 1.5 * letter
            if right + len(words) * letter < last:
                place, align = right, "left"
            elif left - len(words) * letter > first:
                place, align = left, "right"
            else:
                # No room on either side: over the bar, away from the mark.
                early = limit.horizon < (first + last) / 2
                place, align = (last, "right") if early else (first + letter, "left")
                veil = {"boxstyle": "square,pad=0.1", "fc": "#f5f6f4e6", "ec": "none"}
        elif limit.status == Status.beyond_run:
            axes.plot(last, position, ">", color=colour, markersize=6, clip_on=False)
            place, align = last - 1.5 * letter, "right"
            if np.isfinite(limit.low) and limit.low < last:
                bar, row = [limit.low, last], [position, position]
                axes.plot(bar, row, color=colour, linewidth=4.5, alpha=0.4, solid_capstyle="butt")
                place = limit.low - 1.5 * letter
                if place - len(words) * letter < first:
                    place = last - 1.5 * letter
                    veil = {"boxstyle": "square,pad=0.1", "fc": "#f5f6f480", "ec": "none"}
        else:
            if limit.status == Status.at_start:
                axes.plot(first, position, "<", color=colour, markersize=6, clip_on=False)
            place, align = first + 1.5 * letter, "left"
        axes.text(
            place,
            position,
            words,
            fontsize=7.5,
            color=colour,
            ha=align,
            va="center_baseline",
            bbox=veil,
        )


def _lead_axis(axes: Axes, panel: Panel, *, labels: bool) -> None:
    lead = np.asarray(panel.curves[LEAD].values, dtype=float)
    units = str(panel.curves[LEAD].attrs.get("units", "hours"))
    first, last = float(lead[0]), float(lead[-1])
    axes.set_xlim(first, last if last > first else first + 1.0)
    axes.xaxis.set_major_locator(lead_locator(first, last, units))
    axes.tick_params(axis="x", labelbottom=labels)
