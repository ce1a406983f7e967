"""A briefing on one page of A4, for those who mail it or pin it up."""

from __future__ import annotations

import os
from collections.abc import Sequence
from dataclasses import dataclass, replace
from pathlib import Path

import numpy as np
from matplotlib.axes import Axes
from matplotlib.transforms import Bbox

from ensemble_horizon.products.curve_panel import (
    Panel,
    draw_panel,
)
from ensemble_horizon.products.fitted_text import broken, drawable, shortened
from ensemble_horizon.products.limits import Limit
from ensemble_horizon.products.map_legend import (
    MapField,
    draw_legend,
    legend_entries,
    legend_rows,
    status_shares,
)
from ensemble_horizon.products.maps import draw_field, map_content, map_criterion, shared_scales
from ensemble_horizon.products.page.briefing import Briefing
from ensemble_horizon.products.page.naming import told_apart
from ensemble_horizon.products.paper import HEIGHT, MARGIN, WIDTH, Paper
from ensemble_horizon.products.places import Ground
from ensemble_horizon.products.sheet import SOFT_INK, line_height
from ensemble_horizon.products.sheet_notes import draw_notes
from ensemble_horizon.products.sheet_table import (
    ROW,
    SHORTER,
    TablePlan,
    draw_table,
    plan_table,
)
from ensemble_horizon.products.view import MapView, map_view
from ensemble_horizon.products.wording import interval_name, lead_units, start_text
from ensemble_horizon.vocabulary import CAUTION, CRITERION, LEAD, PLACE, START, Status

SOFTWARE = "Ensemble Horizon"
_ROOM = WIDTH - 2 * MARGIN
_MOST_MAPS, _MOST_STRIPS, _MOST_TROUBLES, _MOST_LINES = 2, 6, 5, 3
_LOWEST_MAP, _HIGHEST_MAP = 236, 560
_BESIDE_MAP = (50, 98)  # parallels at the left, colour bar at the right
_MAP_TITLE, _MAP_TICKS, _MAP_LEGEND = 50, 28, 24
_PANEL_LEFT, _PANEL_WIDTH = MARGIN + 44, 420


def write_sheet(path: str | os.PathLike[str], briefing: Briefing) -> Path:
    """Write a briefing as PDF of one page, A4 upright.

    Title, start and members; what was wrong with the input; the limits, the shortest first, as many
    as the page holds; maps of the two variables whose limits are shortest; the growth curve of the
    shortest limit; notes and the caution. Fonts are embedded, and no time but ``briefing.made`` is
    in the file: the same briefing makes the same bytes.

    Parameters
    ----------
    path : path
        The file to write.
    briefing : Briefing
        Of one start.

    Returns
    -------
    pathlib.Path

    Raises
    ------
    ArgumentError
        If curves or maps lack a dimension, or the grid of a map cannot be drawn.
    ProductError
        If the file cannot be written; nothing half-written stays behind.
    """
    paper = draw_sheet(briefing)
    title = f"{drawable(briefing.title)}, {start_text(briefing.start)}"
    software = f"{SOFTWARE} {briefing.version}".strip()
    return paper.write(Path(path), title=title, software=software, made=briefing.made)


def draw_sheet(briefing: Briefing) -> Paper:
    """Lay the page out and draw it."""
    paper = Paper()
    briefing = told_apart(briefing)
    limits = briefing.shortest_first()
    top = _trouble(paper, _head(paper, briefing), briefing.troubles)
    foot = _foot(paper, briefing)
    plans = _map_plans(briefing, limits)
    panel = _panel(briefing, limits)
    below = (panel.height + 16) if panel else 0
    around = _MAP_TITLE + _MAP_TICKS + _legend_height(plans) + 10 if plans else 0
    # The table first, then maps as large as the rest of the page allows.
    left = foot - top - below - around - 10
    table = _table(briefing, limits, left - _map_height(plans, _LOWEST_MAP))
    high = int(np.clip(left - table.height, _LOWEST_MAP, _HIGHEST_MAP)) if plans else 0
    draw_table(paper, top, table)
    top += table.height + 10
    if len(table.rows) < len(limits):
        more = f"and {len(limits) - len(table.rows)} more on the page"
        paper.text(MARGIN, top - 8, more, size=8, colour=SOFT_INK)
        top += ROW
    if plans:
        top = _maps(paper, plans, top, high, briefing.ground)
    if panel:
        draw_panel(paper, panel, _PANEL_LEFT, top + 6)
    draw_notes(paper, briefing, panel, top + 6, foot)
    return paper


def _table(briefing: Briefing, limits: Sequence[Limit], room: float) -> TablePlan:
    """Set the table out: names in several lines where there is room, in one where there is not."""
    name = interval_name(briefing.results[0].curves.attrs.get("confidence"))
    usual = [briefing.usual_of(limit) for limit in limits]
    for most in range(_MOST_LINES, 0, -1):
        plan = plan_table(limits, usual, name, most=most)
        if plan.height <= room:
            return plan
    fit = plan.rows_that_fit(room)
    return plan_table(limits[:fit], usual[:fit], name)


def _head(paper: Paper, briefing: Briefing) -> float:
    """Write title, start and members; return where the next thing stands."""
    title = broken(briefing.title, _ROOM, 16, most=2, bold=True) or [SOFTWARE]
    top = paper.lines(MARGIN, 44, title, size=16, weight="bold")
    parts = [f"Start {start_text(briefing.start)}", briefing.members]
    words = "   ·   ".join(part for part in parts if part)
    return paper.lines(MARGIN, top, broken(words, _ROOM, 10, most=2), size=10) + 10


def _trouble(paper: Paper, top: float, troubles: Sequence[str]) -> float:
    """Write what was wrong with the input, if anything was."""
    if not troubles:
        return top + 4
    told = list(troubles[:_MOST_TROUBLES])
    if len(troubles) > len(told):
        told.append(f"and {len(troubles) - len(told)} more on the page")
    lines = [line for words in told for line in broken(words, _ROOM - 28, 8.5, most=2)]
    height = line_height(9) + len(lines) * line_height(8.5) + 16
    paper.area((MARGIN - 6, top, _ROOM + 12, height), "#f7efe9")
    paper.area((MARGIN - 6, top, 4, height), SHORTER)
    words = ["What was wrong with the input"]
    lower = paper.lines(MARGIN + 10, top + 7, words, size=9, weight="bold", colour=SHORTER)
    paper.lines(MARGIN + 10, lower + 2, lines, size=8.5)
    return top + height + 14


def _foot(paper: Paper, briefing: Briefing) -> float:
    """Write the caution and where the page comes from; return where they begin."""
    lines = broken(CAUTION, _ROOM, 7.5, most=3)
    program = f"{SOFTWARE} {briefing.version}".strip()
    made = f"{program}, made {briefing.made:%Y-%m-%d %H:%M} UTC"
    lines += broken(made, _ROOM, 7.5, most=1)
    top = HEIGHT - 40 - len(lines) * line_height(7.5)
    paper.rule(top - 8)
    paper.lines(MARGIN, top, lines, size=7.5, colour=SOFT_INK)
    return top - 14


@dataclass(frozen=True)
class _MapPlan:
    """A map to draw: its fields, its view, and the room it has from left to right."""

    content: MapField
    view: MapView
    title: str
    subtitle: str
    width: int
    legend: list[list[tuple[float, Status, str]]]


def _map_plans(briefing: Briefing, limits: Sequence[Limit]) -> list[_MapPlan]:
    """Choose the maps: of the variables whose limits are shortest, that criterion."""
    with_maps = {
        str(item.curves.attrs.get("variable", "variable")): item.maps
        for item in briefing.results
        if item.maps is not None
    }
    chosen: dict[str, Limit] = {}
    for limit in limits:
        if limit.variable in with_maps and limit.criterion in list(
            map(str, with_maps[limit.variable][CRITERION].values)
        ):
            chosen.setdefault(limit.variable, limit)
    several = list(chosen.values())[:_MOST_MAPS]
    width = (_ROOM - 24) // 2 if len(several) > 1 else _ROOM
    plans = []
    for limit in several:
        maps = with_maps[limit.variable].isel({START: 0})
        labels = [str(label) for label in maps[CRITERION].values]
        one = maps.isel({CRITERION: labels.index(limit.criterion)}).compute()
        content = map_content(one, limit.members, limit.last_lead)
        view = map_view(one["horizon"])
        shares = status_shares(view, content, *view.pixel_size(400, 400))
        plans.append(
            _MapPlan(
                content, view, limit.long_name, map_criterion(one), width,
                legend_rows(legend_entries(content, shares), width),
            )
        )  # fmt: skip
    return plans


def _map_sizes(plans: Sequence[_MapPlan], most: int) -> list[tuple[int, int]]:
    return [plan.view.pixel_size(plan.width - sum(_BESIDE_MAP), most) for plan in plans]


def _map_height(plans: Sequence[_MapPlan], most: int) -> int:
    return max((height for _, height in _map_sizes(plans, most)), default=0)


def _legend_height(plans: Sequence[_MapPlan]) -> int:
    return _MAP_LEGEND * max((len(plan.legend) for plan in plans), default=0)


def _maps(paper: Paper, plans: Sequence[_MapPlan], top: float, most: int, ground: Ground) -> float:
    """Draw the maps side by side; return where the next thing stands."""
    before = _BESIDE_MAP[0]
    scales = shared_scales(plan.content for plan in plans)
    sizes, high = _map_sizes(plans, most), _map_height(plans, most)
    legend = top + _MAP_TITLE + high + _MAP_TICKS
    for position, (plan, (width, height)) in enumerate(zip(plans, sizes, strict=True)):
        left = MARGIN + position * (plan.width + 24)
        title = shortened(f"How far ahead: {plan.title}", plan.width, 9.5, bold=True)
        paper.text(left, top, title, size=9.5, weight="bold")
        words = shortened(plan.subtitle, plan.width, 8)
        paper.text(left, top + 19, words, size=8, colour=SOFT_INK)
        box = (left + before, top + _MAP_TITLE, width, height)
        marks = [
            replace(mark, name=shortened(mark.name, 0.5 * width, 8, bold=True))
            for mark in ground.marks
        ]
        named = replace(ground, marks=tuple(marks))
        scale = scales[lead_units(plan.content.units)]
        axes = draw_field(paper, plan.view, plan.content, box, named, scale)
        _clear(axes)
        draw_legend(paper, plan.legend, legend, left)
    return legend + _legend_height(plans) + 10


def _clear(axes: Axes) -> None:
    """Take away names and numbers that would cover an earlier one or leave the map."""
    figure = axes.get_figure()
    if figure is None:
        return
    renderer = figure.canvas.get_renderer()  # type: ignore[attr-defined]
    inside = axes.get_window_extent(renderer)
    kept: list[Bbox] = []
    for words in list(axes.texts):
        box = words.get_window_extent(renderer)
        within = inside.x0 <= box.x0 and box.x1 <= inside.x1
        within &= inside.y0 <= box.y0 and box.y1 <= inside.y1
        if not within or any(box.overlaps(other) for other in kept):
            words.remove()
        else:
            kept.append(box)


def _panel(briefing: Briefing, limits: Sequence[Limit]) -> Panel | None:
    """Choose the growth curve: of the variable and place whose limit is the shortest."""
    if not limits:
        return None
    first = limits[0]
    curves = next(
        item.curves
        for item in briefing.results
        if str(item.curves.attrs.get("variable", "variable")) == first.variable
    ).transpose(START, PLACE, CRITERION, LEAD, ..., missing_dims="ignore")
    start, place, _ = first.index
    one = curves.isel({START: start, PLACE: place}).compute()
    here = [
        limit
        for limit in limits
        if limit.variable == first.variable and limit.index[:2] == (start, place)
    ]
    title = shortened(first.place, _PANEL_WIDTH, 10.5, bold=True)
    shown = sorted(here[:_MOST_STRIPS], key=lambda limit: limit.index)
    return Panel(
        curves=one,
        limits=[replace(limit, place=title) for limit in shown],
        width=_PANEL_WIDTH,
        with_chance="chance" in one and bool(one["chance"].notnull().any()),
    )
