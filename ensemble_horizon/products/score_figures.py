"""Scores by lead, place by place, and rank counts, as pictures."""

from __future__ import annotations

import os
from collections.abc import Sequence
from pathlib import Path

import numpy as np
import xarray as xr
from matplotlib.axes import Axes
from matplotlib.lines import Line2D
from matplotlib.ticker import MaxNLocator

from ensemble_horizon.products.panel_grid import PanelGrid
from ensemble_horizon.products.score_panel import INKS, ScorePanel, draw_score_panel, plural
from ensemble_horizon.products.scores import ScoredVariable, skill_limits
from ensemble_horizon.products.sheet import FAINT, INK, SOFT_INK, Sheet, line_height, wrapped
from ensemble_horizon.products.wording import interval_name, lead_number, lead_units
from ensemble_horizon.vocabulary import CAUTION, LEAD, PLACE, RANK

SOFTWARE = "Ensemble Horizon"
MOST_PANELS, MOST_ROWS, MOST_LEADS = 6, 8, 5
_WIDTH, _LONE, _GAP, _MARGIN = 372, 560, 74, 62
_WORDS = {
    "rmse": "RMSE of the mean",
    "spread": "spread",
    "control_rmse": "RMSE of the control",
    "climatology_rmse": "RMSE of climatology",
    "persistence_rmse": "RMSE of persistence",
    "skill_climatology": "CRPS skill over climatology",
    "skill_persistence": "CRPS skill over persistence",
    "anomaly_correlation": "anomaly correlation",
}
_BAR, _BAR_WIDTH, _BAR_HEIGHT = "#5f7f95", 196, 92


def draw_scores(result: ScoredVariable, path: str | os.PathLike[str]) -> list[Path]:
    """Draw the scores of one variable by lead as PNG, one panel for each place.

    A panel shows error and spread with those of the references, the spread-error ratio beside one,
    and skill and correlation with the leads at which they fall to their levels. After six places a
    next picture follows, with ``_2`` in its name.

    Raises
    ------
    ProductError
        If a picture cannot be written.
    """
    data = result.places
    limits = skill_limits([result])
    panels = [
        ScorePanel(
            data.isel({PLACE: row}),
            [
                item
                for item in limits
                if (item.place, item.against)
                == (str(data[PLACE].values[row]), str(data["against"].values[row]))
            ],
            _WIDTH if data.sizes[PLACE] > 1 else _LONE,
        )
        for row in range(data.sizes[PLACE])
    ]
    target = Path(path)
    written = []
    for count, first in enumerate(range(0, len(panels), MOST_PANELS), start=1):
        name = target if count == 1 else target.with_stem(f"{target.stem}_{count}")
        written.append(_score_sheet(data, panels[first : first + MOST_PANELS], name))
    return written


def draw_ranks(result: ScoredVariable, path: str | os.PathLike[str]) -> Path:
    """Draw how often the analysis takes each rank: a row for each place, a column for some leads.

    Raises
    ------
    ProductError
        If the picture cannot be written.
    """
    data = result.places.isel({PLACE: slice(0, MOST_ROWS)})
    rows = data.sizes[PLACE]
    leads = np.unique(np.linspace(0, data.sizes[LEAD] - 1, MOST_LEADS).round().astype(int))
    width = int(_MARGIN + 10 + leads.size * (_BAR_WIDTH + 24) + 10)
    room = width - 40
    title = wrapped(f"Rank of the analysis: {data.attrs['long_name']}", room, 13.5, bold=True)
    note = (
        f"{data.attrs['starts']} starts   ·   {data.attrs['members']} members   ·   "
        "share of each rank; the line is where flat ranks lie   ·   "
        "p: chance of ranks so uneven, were they flat in truth"
    )
    notes = wrapped(note, room, 9)
    foot = wrapped(
        "High at both ends: too little spread. Higher on one side: a mean error. " + CAUTION,
        room, 7.5,
    )  # fmt: skip
    top = 22 + len(title) * line_height(13.5) + len(notes) * line_height(9) + 8
    step = _BAR_HEIGHT + 74
    sheet = Sheet(width, int(top + rows * step + len(foot) * line_height(7.5) + 8))
    sheet.text(20, 16, "\n".join(title), size=13.5, weight="bold")
    lower = 20 + len(title) * line_height(13.5)
    sheet.text(20, lower, "\n".join(notes), size=9, colour=SOFT_INK)
    units = str(data.attrs["lead_units"])
    for row in range(rows):
        upper = top + row * step
        one = data.isel({PLACE: row})
        words = f"{one[PLACE].values}, against {plural(str(one['against'].values))}"
        sheet.text(_MARGIN, upper, words, size=10, weight="bold")
        highest = float(np.nanmax(one["rank_share"].values, initial=0.0)) * data.sizes[RANK]
        for column, lead in enumerate(leads):
            left = _MARGIN + column * (_BAR_WIDTH + 24)
            axes = sheet.axes(left, upper + 40, _BAR_WIDTH, _BAR_HEIGHT)
            _rank_bars(axes, one["rank_share"].values[lead], highest, labels=column == 0)
            p = float(one["rank_p_value"].values[lead])
            told = "" if np.isnan(p) else f"   p {'< 0.001' if p < 0.001 else f'= {p:.2g}'}"
            moment = f"{lead_number(float(one[LEAD].values[lead]), units)} {lead_units(units)}"
            sheet.text(left, upper + 22, moment + told, size=8, colour=SOFT_INK)
    sheet.text(20, top + rows * step, "\n".join(foot), size=7.5, colour=SOFT_INK)
    return sheet.save(Path(path), software=SOFTWARE)


def _rank_bars(axes: Axes, share: np.ndarray, highest: float, *, labels: bool) -> None:
    """Bars of shares in units of that of flat ranks."""
    axes.bar(np.arange(share.size), share * share.size, width=0.86, color=_BAR, zorder=2)
    axes.axhline(1.0, color=INK, linewidth=1.0, zorder=3)
    axes.set_xlim(-0.6, share.size - 0.4)
    axes.set_ylim(0, max(highest * 1.06, 1.6))
    axes.xaxis.set_major_locator(MaxNLocator(5, integer=True))
    axes.yaxis.set_major_locator(MaxNLocator(4))
    axes.tick_params(axis="y", labelleft=labels)
    axes.grid(axis="y", color=FAINT, linewidth=0.6)
    axes.set_axisbelow(True)


def _score_sheet(data: xr.Dataset, panels: Sequence[ScorePanel], path: Path) -> Path:
    columns = min(len(panels), 3)
    size = (panels[0].width, panels[0].height)
    grid = PanelGrid(len(panels), columns, *size, margin=_MARGIN, gap=_GAP, space=14)
    room = grid.room
    title = wrapped(f"How good the forecast was: {data.attrs['long_name']}", room, 13.5, bold=True)
    units = str(data.attrs["units"])
    unit = "" if units == "1" else f"   ·   errors in {units}"
    subtitle = wrapped(
        f"{data.attrs['starts']} starts   ·   {data.attrs['members']} members{unit}   ·   lead in "
        f"{lead_units(str(data.attrs['lead_units']))}", room, 9.5, most=2,
    )  # fmt: skip
    names = [name for name in _WORDS if any(panel.has(name) for panel in panels)]
    legend = _set_out(names, room)
    band = interval_name(data.attrs.get("confidence"))
    note = (
        f"Bands: {band}. Spread is drawn as it is; the ratio counts it times the root of "
        "(M + 1)/M. Dots: where a score falls to its level. "
    )
    notes = wrapped(note + CAUTION, room, 7.5)
    sheet, head, upper = grid.sheet(title, subtitle, len(legend), notes)
    _legend(sheet, legend, head)
    for panel, corner in zip(panels, grid.corners(upper), strict=True):
        draw_score_panel(sheet, panel, *corner)
    return sheet.save(path, software=SOFTWARE)


def _set_out(names: Sequence[str], room: float) -> list[list[tuple[float, str]]]:
    rows: list[list[tuple[float, str]]] = [[]]
    x = 0.0
    for name in names:
        need = 54 + len(_WORDS[name]) * 7.9
        if rows[-1] and x + need > room:
            rows.append([])
            x = 0.0
        rows[-1].append((x, name))
        x += need
    return rows


def _legend(sheet: Sheet, rows: list[list[tuple[float, str]]], top: float) -> None:
    for position, row in enumerate(rows):
        for x, name in row:
            upper = top + 22 * position
            colour, dashes = INKS[name]
            y = 1 - (upper + 8) / sheet.height
            sheet.figure.add_artist(
                Line2D(
                    [(20 + x) / sheet.width, (20 + x + 26) / sheet.width], [y, y], color=colour,
                    linewidth=1.7, linestyle="-" if dashes is None else (0, dashes),
                )
            )  # fmt: skip
            sheet.text(20 + x + 33, upper, _WORDS[name], size=8.5)
