"""Growth curves of one place as lines of an SVG; colours are left to the style of the page."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
import xarray as xr
from matplotlib.ticker import LogLocator, MaxNLocator

from ensemble_horizon.products.curve_panel import lead_locator, level_on_curve
from ensemble_horizon.products.limits import Limit
from ensemble_horizon.products.wording import lead_number, number
from ensemble_horizon.vocabulary import LEAD, Status

WIDTH = 360
LEFT, RIGHT, TOP = 44, 340, 20
CURVE, CHANCE, GAP, ROW, FOOT = 150, 52, 22, 15, 36
_LOG_FROM = 30.0
_LETTERS = "ABCDEFGHIJKLMNOPQRSTUVWXYZ"
_COLOURS = 6


@dataclass(frozen=True)
class Tick:
    """A tick at a position of an axis."""

    at: float
    label: str


@dataclass(frozen=True)
class Level:
    """A criterion on a plot: its height, and where the curve crosses it (None: nowhere)."""

    y: float
    drop: float | None
    letter: str
    colour: int


@dataclass(frozen=True)
class StripRow:
    """A criterion in the strip below the curves: interval and limit along the lead axis."""

    y: float
    letter: str
    colour: int
    low: float | None
    high: float | None
    mark: float | None
    end: str


@dataclass(frozen=True)
class Plot:
    """One axes: its upper and lower edge, lines as SVG paths, ticks and levels."""

    top: float
    bottom: float
    paths: tuple[tuple[str, str], ...]
    ticks: tuple[Tick, ...]
    levels: tuple[Level, ...]
    empty: str = ""


@dataclass(frozen=True)
class CurvePlot:
    """All of one panel, in units of the view box."""

    height: float
    spread: Plot
    chance: Plot | None
    strip: tuple[StripRow, ...]
    strip_top: float
    bottom: float
    leads: tuple[Tick, ...]
    logarithmic: bool


def letter_of(position: int) -> str:
    """Return the letter of a criterion by its position: A to Z, then A2 and so on."""
    turn, place = divmod(position, len(_LETTERS))
    return _LETTERS[place] + (str(turn + 1) if turn else "")


def colour_of(position: int) -> int:
    """Return the number of the colour of a criterion by its position."""
    return position % _COLOURS


def curve_plot(curves: xr.Dataset, limits: Sequence[Limit], *, with_chance: bool) -> CurvePlot:
    """Return the panel of one place.

    Parameters
    ----------
    curves : xarray.Dataset
        Curves of one start and place: dimensions (criterion, lead).
    limits : sequence of Limit
        Of the same place, in the order of the criteria.
    with_chance : bool
        Whether panels of this variable have an axis for chances.
    """
    axis = _LeadAxis.of(curves)
    spread, logarithmic = _spread(curves, limits, axis)
    lower = spread.bottom
    chance = None
    if with_chance:
        chance = _chance(curves, limits, axis, lower + GAP)
        lower = chance.bottom
    strip_top = lower + 8
    strip = tuple(
        _strip_row(limit, position, axis, strip_top + ROW * (position + 0.5))
        for position, limit in enumerate(limits)
    )
    bottom = strip_top + ROW * len(limits)
    leads = tuple(Tick(axis.x(lead), lead_number(lead, axis.units)) for lead in axis.ticks())
    return CurvePlot(bottom + FOOT, spread, chance, strip, strip_top, bottom, leads, logarithmic)


@dataclass(frozen=True)
class _LeadAxis:
    lead: np.ndarray
    units: str

    @classmethod
    def of(cls, curves: xr.Dataset) -> _LeadAxis:
        lead = np.asarray(curves[LEAD].values, dtype=float)
        return cls(lead, str(curves[LEAD].attrs.get("units", "hours")))

    @property
    def ends(self) -> tuple[float, float]:
        first, last = float(self.lead[0]), float(self.lead[-1])
        return first, last if last > first else first + 1.0

    def x(self, lead: float) -> float:
        first, last = self.ends
        share = float(np.clip((lead - first) / (last - first), 0, 1))
        return round(LEFT + share * (RIGHT - LEFT), 1)

    def ticks(self) -> list[float]:
        first, last = self.ends
        ticks = lead_locator(first, last, self.units).tick_values(first, last)
        return [float(tick) for tick in ticks if first - 1e-9 <= tick <= last + 1e-9]


@dataclass(frozen=True)
class _ValueAxis:
    top: float
    bottom: float
    low: float
    high: float
    logarithmic: bool = False

    def y(self, value: float) -> float:
        low, high = self.low, self.high
        if self.logarithmic:
            value, low, high = (float(np.log(max(v, 1e-300))) for v in (value, low, high))
        share = float(np.clip((value - low) / (high - low), 0, 1))
        return round(self.bottom - share * (self.bottom - self.top), 1)

    def ticks(self) -> tuple[Tick, ...]:
        locator = (
            LogLocator(subs=(1.0, 2.0, 5.0), numticks=8) if self.logarithmic else MaxNLocator(4)
        )
        values = [float(value) for value in locator.tick_values(self.low, self.high)]
        return tuple(
            Tick(self.y(value), number(value)) for value in values if self.low <= value <= self.high
        )


def _values(curves: xr.Dataset, name: str) -> np.ndarray:
    if name not in curves:
        return np.full(curves.sizes[LEAD], np.nan)
    return np.asarray(curves[name].values, dtype=float)


def _spread(curves: xr.Dataset, limits: Sequence[Limit], axis: _LeadAxis) -> tuple[Plot, bool]:
    top, bottom = TOP, TOP + CURVE
    spread, fitted = _values(curves, "spread"), _values(curves, "fitted")
    low, high = _values(curves, "spread_low"), _values(curves, "spread_high")
    if not np.isfinite(spread).any():
        return Plot(top, bottom, (), (), (), "no curve: too little known"), False
    saturation = float(curves["saturation"].values) if "saturation" in curves else float("nan")
    units = str(curves.attrs.get("units", "1"))
    levels = [level_on_curve(limit, units, saturation) for limit in limits]
    scale = _value_axis(np.stack([spread, low, high]), levels)
    paths = (
        ("band", _band(axis, scale, low, high)),
        ("law", _line(axis, scale, fitted)),
        ("spread", _line(axis, scale, spread)),
    )
    marks = _levels(limits, levels, axis, scale)
    return Plot(top, bottom, paths, scale.ticks(), marks), scale.logarithmic


def _value_axis(curves: np.ndarray, levels: Sequence[float]) -> _ValueAxis:
    known = curves[0][np.isfinite(curves[0]) & (curves[0] > 0)]
    logarithmic = known.size > 2 and known.max() / known.min() >= _LOG_FROM
    shown = curves[np.isfinite(curves) & ((curves > 0) if logarithmic else True)]
    high = float(shown.max())
    high = max([high, *(level for level in levels if level <= 3 * high)])
    if logarithmic:
        return _ValueAxis(TOP, TOP + CURVE, float(shown.min()) / 1.25, high * 1.35, True)
    return _ValueAxis(TOP, TOP + CURVE, 0.0, high * 1.08 or 1.0)


def _chance(curves: xr.Dataset, limits: Sequence[Limit], axis: _LeadAxis, top: float) -> Plot:
    scale = _ValueAxis(top, top + CHANCE, 0.0, 1.0)
    paths, shown, levels = [], [], []
    for position, limit in enumerate(limits):
        chance = np.asarray(curves["chance"].values[position], dtype=float)
        drawn = bool(np.isfinite(chance).any())
        shown.append(limit)
        levels.append(limit.threshold if drawn else float("nan"))
        if drawn:
            paths.append((f"chance c{colour_of(position)}", _line(axis, scale, chance)))
    ticks = tuple(Tick(scale.y(share), f"{100 * share:.0f} %") for share in (0.0, 0.5, 1.0))
    empty = "" if paths else "no chance: too little known"
    marks = _levels(shown, levels, axis, scale)
    return Plot(top, top + CHANCE, tuple(paths), ticks, marks, empty)


def _levels(
    limits: Sequence[Limit], levels: Sequence[float], axis: _LeadAxis, scale: _ValueAxis
) -> tuple[Level, ...]:
    marks = []
    for position, (limit, level) in enumerate(zip(limits, levels, strict=True)):
        if not np.isfinite(level) or not scale.low <= level <= scale.high:
            continue
        drop = axis.x(limit.horizon) if limit.status == Status.reached else None
        marks.append(Level(scale.y(level), drop, letter_of(position), colour_of(position)))
    return _apart(marks)


def _apart(marks: list[Level]) -> tuple[Level, ...]:
    """Join the letters of levels that lie too close to stand beside one another."""
    joined: list[Level] = []
    for mark in sorted(marks, key=lambda mark: mark.y):
        letter = mark.letter
        if joined and abs(joined[-1].y - mark.y) < 11 and joined[-1].letter:
            before = joined[-1]
            letter = "".join(sorted(before.letter + letter))
            joined[-1] = Level(before.y, before.drop, "", before.colour)
        joined.append(Level(mark.y, mark.drop, letter, mark.colour))
    return tuple(joined)


def _strip_row(limit: Limit, position: int, axis: _LeadAxis, y: float) -> StripRow:
    low, high, mark, end = None, None, None, ""
    last = axis.ends[1]
    if limit.status == Status.reached:
        mark, end = axis.x(limit.horizon), "limit"
        low = axis.x(limit.low) if np.isfinite(limit.low) else mark
        high = mark if np.isnan(limit.high) else axis.x(min(limit.high, last))
    elif limit.status == Status.beyond_run:
        mark, end = axis.x(last), "beyond"
        if np.isfinite(limit.low):
            low, high = axis.x(limit.low), axis.x(last)
    elif limit.status == Status.at_start:
        mark, end = float(LEFT), "start"
    return StripRow(y, letter_of(position), colour_of(position), low, high, mark, end)


def _points(axis: _LeadAxis, scale: _ValueAxis, values: np.ndarray) -> list[list[str]]:
    """Return the points of a curve, run by run between what is not known."""
    runs: list[list[str]] = [[]]
    for lead, value in zip(axis.lead, values, strict=True):
        if np.isfinite(value):
            runs[-1].append(f"{axis.x(lead):g} {scale.y(value):g}")
        elif runs[-1]:
            runs.append([])
    return [run for run in runs if run]


def _line(axis: _LeadAxis, scale: _ValueAxis, values: np.ndarray) -> str:
    return "".join("M" + "L".join(run) for run in _points(axis, scale, values))


def _band(axis: _LeadAxis, scale: _ValueAxis, low: np.ndarray, high: np.ndarray) -> str:
    both = np.isfinite(low) & np.isfinite(high)
    lower = _points(axis, scale, np.where(both, low, np.nan))
    upper = _points(axis, scale, np.where(both, high, np.nan))
    return "".join(
        "M" + "L".join([*above, *reversed(below)]) + "Z"
        for above, below in zip(upper, lower, strict=True)
    )
