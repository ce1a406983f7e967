"""One panel of scores by lead: sizes of error and spread, their ratio, skill with its limits."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import xarray as xr
from matplotlib.axes import Axes
from matplotlib.ticker import FuncFormatter, MaxNLocator

from ensemble_horizon.products.curve_panel import lead_locator
from ensemble_horizon.products.scores import SkillLimit
from ensemble_horizon.products.sheet import FAINT, INK, SOFT_INK, Sheet, wrapped
from ensemble_horizon.products.wording import number
from ensemble_horizon.vocabulary import LEAD, SCORE, Status

# Told apart by lightness, hue and dashes: (colour, dashes or None).
INKS = {
    "rmse": (INK, None),
    "spread": ("#b5481b", None),
    "control_rmse": ("#7d8a93", (5, 2)),
    "climatology_rmse": ("#14796f", (1.2, 1.6)),
    "persistence_rmse": ("#8f7a00", (4, 1.5, 1, 1.5)),
    "spread_error_ratio": ("#b5481b", None),
    "skill_climatology": ("#14796f", None),
    "skill_persistence": ("#8f7a00", (4, 1.5, 1, 1.5)),
    "anomaly_correlation": ("#54308a", (6, 2)),
}
SIZES = ("rmse", "spread", "control_rmse", "climatology_rmse", "persistence_rmse")
SKILLS = ("skill_climatology", "skill_persistence", "anomaly_correlation")
BANDED = ("rmse", "spread_error_ratio", *SKILLS)
SIZE_HEIGHT, RATIO_HEIGHT, SKILL_HEIGHT = 176, 84, 150
TITLE_HEIGHT, GAP, TICKS_HEIGHT = 44, 12, 34


@dataclass(frozen=True)
class ScorePanel:
    """What one panel shows: the scores of one place, and its limits."""

    scores: xr.Dataset
    limits: list[SkillLimit]
    width: int

    @property
    def height(self) -> int:
        """Height in pixels, title and tick labels included."""
        axes = SIZE_HEIGHT + GAP + RATIO_HEIGHT + GAP + SKILL_HEIGHT
        return TITLE_HEIGHT + axes + TICKS_HEIGHT

    def has(self, name: str) -> bool:
        """Whether a score has any value here."""
        return name in self.scores[SCORE].values and bool(np.isfinite(self.values(name)).any())

    def values(self, name: str, end: str = "value") -> np.ndarray:
        """Return a score over lead."""
        return np.asarray(self.scores[end].sel({SCORE: name}).values, dtype=float)


def draw_score_panel(sheet: Sheet, panel: ScorePanel, left: float, top: float) -> None:
    """Draw one panel with its upper left corner at ``left``, ``top`` pixels."""
    place, against = str(panel.scores["place"].values), str(panel.scores["against"].values)
    title = wrapped(f"{place}, against {plural(against)}", panel.width, 10.5, most=1, bold=True)[0]
    sheet.text(left, top, title, size=10.5, weight="bold")
    note = wrapped(limit_note(panel), panel.width + 40, 7.8, most=1)[0]
    sheet.text(left, top + 21, note, size=7.8, colour=SOFT_INK)
    upper = top + TITLE_HEIGHT
    _sizes(sheet.axes(left, upper, panel.width, SIZE_HEIGHT), panel)
    upper += SIZE_HEIGHT + GAP
    _ratio(sheet.axes(left, upper, panel.width, RATIO_HEIGHT), panel)
    upper += RATIO_HEIGHT + GAP
    _skill(sheet.axes(left, upper, panel.width, SKILL_HEIGHT), panel)


def limit_note(panel: ScorePanel) -> str:
    """Return the line below the title: where skill and correlation end."""
    shown = {item.score: item for item in panel.limits if item.status != Status.no_data}
    names = [name for name in (SKILLS[0], SKILLS[1]) if name in shown][:1]
    names += [name for name in (SKILLS[2],) if name in shown]
    return " · ".join(_short(shown[name]) for name in names) or "no limit of skill known"


def _short(limit: SkillLimit) -> str:
    words = "beyond the run" if limit.status == Status.beyond_run else limit.words
    kind = "correlation" if limit.score == SKILLS[2] else "skill"
    return f"{kind} {limit.level:g}: {words}"


def plural(against: str) -> str:
    """Return what the forecasts are held against, in the plural."""
    return {"analysis": "analyses", "observation": "observations"}.get(against, against)


def _sizes(axes: Axes, panel: ScorePanel) -> None:
    _lead_axis(axes, panel, labels=False)
    names = [name for name in SIZES if panel.has(name)]
    for name in names:
        _curve(axes, panel, name)
    known = np.concatenate([panel.values(name) for name in names]) if names else np.ones(1)
    axes.set_ylim(0, float(np.nanmax(known)) * 1.08 or 1.0)
    axes.yaxis.set_major_locator(MaxNLocator(5))
    axes.yaxis.set_major_formatter(FuncFormatter(lambda value, _: number(value)))


def _ratio(axes: Axes, panel: ScorePanel) -> None:
    _lead_axis(axes, panel, labels=False)
    axes.axhline(1.0, color=SOFT_INK, linewidth=1.0, zorder=2)
    reach = 0.25
    if panel.has("spread_error_ratio"):
        _curve(axes, panel, "spread_error_ratio")
        ends = [panel.values("spread_error_ratio", end) for end in ("value", "low", "high")]
        reach = max(reach, float(np.nanmax(np.abs(np.stack(ends) - 1))))
    reach = min(reach * 1.1, 1.5)
    axes.set_ylim(max(1 - reach, 0.0), 1 + reach)
    axes.yaxis.set_major_locator(MaxNLocator(3))
    _inside(axes, "spread / error")


def _skill(axes: Axes, panel: ScorePanel) -> None:
    _lead_axis(axes, panel, labels=True)
    lowest = 0.0
    for level in sorted({item.level for item in panel.limits}):
        axes.axhline(level, color=SOFT_INK, linewidth=0.8, zorder=2)
    for name in SKILLS:
        if panel.has(name):
            _curve(axes, panel, name)
            lowest = min(lowest, float(np.nanmin(panel.values(name))))
    bottom = max(lowest - 0.08, -0.5) if lowest < 0 else -0.08
    for item in panel.limits:
        if item.score in SKILLS and item.status == Status.reached:
            colour = INKS[item.score][0]
            axes.plot([item.horizon] * 2, [bottom, item.level], color=colour, lw=1.0, zorder=3)
            axes.plot(item.horizon, item.level, "o", color=colour, markersize=3.8, zorder=5)
    axes.set_ylim(bottom, 1.04)
    axes.yaxis.set_major_locator(MaxNLocator(5))
    if not any(panel.has(name) for name in SKILLS):
        words = "no climatology and no persistence"
        axes.text(0.5, 0.5, words, transform=axes.transAxes, ha="center", fontsize=9,
                  color=SOFT_INK)  # fmt: skip
    _inside(axes, "skill and correlation")


def _curve(axes: Axes, panel: ScorePanel, name: str) -> None:
    lead = np.asarray(panel.scores[LEAD].values, dtype=float)
    colour, dashes = INKS[name]
    if name in BANDED:
        low, high = panel.values(name, "low"), panel.values(name, "high")
        axes.fill_between(lead, low, high, color=colour, alpha=0.16, linewidth=0, zorder=1)
    style = "-" if dashes is None else (0, dashes)
    mark = "." if np.isfinite(panel.values(name)).sum() < 3 else ""
    axes.plot(lead, panel.values(name), color=colour, lw=1.6, linestyle=style, marker=mark,
              zorder=4)  # fmt: skip


def _inside(axes: Axes, words: str) -> None:
    axes.text(
        0.988, 0.93, words, transform=axes.transAxes, va="top", ha="right", fontsize=7.5,
        color=SOFT_INK, zorder=6,
    )  # fmt: skip


def _lead_axis(axes: Axes, panel: ScorePanel, *, labels: bool) -> None:
    lead = np.asarray(panel.scores[LEAD].values, dtype=float)
    first, last = float(lead[0]), float(lead[-1])
    axes.set_xlim(first, last if last > first else first + 1.0)
    units = str(panel.scores.attrs["lead_units"])
    axes.xaxis.set_major_locator(lead_locator(first, last, units))
    axes.tick_params(axis="x", labelbottom=labels)
    axes.grid(color=FAINT, linewidth=0.6)
    axes.set_axisbelow(True)
