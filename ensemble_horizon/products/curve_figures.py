"""Growth curves: how fast the members part, place by place, with the limits below each curve."""

from __future__ import annotations

import os
from collections.abc import Sequence
from pathlib import Path

import xarray as xr
from matplotlib.lines import Line2D
from matplotlib.patches import Rectangle

from ensemble_horizon.errors import ArgumentError
from ensemble_horizon.products.curve_panel import BAND, LAW_INK, Panel, colour_of, draw_panel
from ensemble_horizon.products.limits import Limit, curve_limits
from ensemble_horizon.products.panel_grid import PanelGrid
from ensemble_horizon.products.sheet import INK, Sheet, wrapped
from ensemble_horizon.products.tables import criterion_text
from ensemble_horizon.products.wording import interval_name, lead_units
from ensemble_horizon.vocabulary import CAUTION, CRITERION, LEAD, PLACE, START, Status

SOFTWARE = "Ensemble Horizon"
MOST_PANELS = 12
_PANEL_WIDTH, _LONE_WIDTH, _GAP, _MARGIN = 392, 580, 78, 66


def draw_growth_curves(
    curves: xr.Dataset, path: str | os.PathLike[str], *, start: int = 0
) -> list[Path]:
    """Draw the growth curves of one variable and start as PNG, one panel for each place.

    A panel shows the spread with its band, the fitted law (dashed), each criterion at its threshold
    and, in the strip below, the limits with their intervals or the words why there is none. A
    chance criterion has an axis of its own.

    Parameters
    ----------
    curves : xarray.Dataset
        Curves of one variable, dimensions (start, place, criterion, lead).
    path : path
        The first picture; after twelve places a next one follows, with ``_2`` in its name.
    start : int
        Position of the start.

    Returns
    -------
    list of pathlib.Path

    Raises
    ------
    ArgumentError
        If the curves lack a dimension, or hold no place or criterion.
    ProductError
        If a picture cannot be written.
    """
    ordered = curves.transpose(START, PLACE, CRITERION, LEAD, ..., missing_dims="ignore").compute()
    found = list(curve_limits(ordered.isel({START: [start]})))
    if not found:
        raise ArgumentError(
            "curves",
            expected="at least one place and one criterion",
            found=f"{ordered.sizes[PLACE]} places, {ordered.sizes[CRITERION]} criteria",
            remedy="name a region or a site, and a criterion, in the settings",
        )
    with_chance = "chance" in ordered and bool(ordered["chance"].notnull().any())
    panels = [
        Panel(
            curves=ordered.isel({START: start, PLACE: place}),
            limits=[limit for limit in found if limit.index[1] == place],
            width=_PANEL_WIDTH if ordered.sizes[PLACE] > 1 else _LONE_WIDTH,
            with_chance=with_chance,
        )
        for place in range(ordered.sizes[PLACE])
    ]
    target = Path(path)
    written = []
    for number, first in enumerate(range(0, len(panels), MOST_PANELS), start=1):
        name = target if number == 1 else target.with_stem(f"{target.stem}_{number}")
        written.append(_draw_sheet(panels[first : first + MOST_PANELS], name))
    return written


def _draw_sheet(panels: Sequence[Panel], path: Path) -> Path:
    columns = 1 if len(panels) == 1 else 2 if len(panels) <= 4 else 3
    size = (panels[0].width, panels[0].height)
    grid = PanelGrid(len(panels), columns, *size, margin=_MARGIN, gap=_GAP, space=12)
    first, room = panels[0].limits[0], grid.room
    title = wrapped(f"How fast the members part: {first.long_name}", room, 13.5, most=2, bold=True)
    units = str(panels[0].curves.attrs.get("units", "1"))
    unit = "" if units == "1" else f"   ·   spread in {units}"
    lead = f"   ·   lead in {lead_units(first.horizon_units)}"
    when = first.start_text if first.start == "all" else f"start {first.start_text}"
    subtitle = wrapped(f"{when[0].upper()}{when[1:]}{unit}{lead}", room, 9.5, most=2)
    entries = _entries(panels)
    legend = _set_out(entries, room)
    notes = wrapped(_strip_note(panels), room, 7.5) + wrapped(CAUTION, room, 7.5)
    sheet, head, upper = grid.sheet(title, subtitle, len(legend), notes)
    _legend(sheet, legend, head)
    for panel, corner in zip(panels, grid.corners(upper), strict=True):
        draw_panel(sheet, panel, *corner)
    return sheet.save(path, software=SOFTWARE)


def _entries(panels: Sequence[Panel]) -> list[tuple[str, str]]:
    """Return (kind or colour, words) of the legend; a threshold only where all places share it."""
    band = interval_name(panels[0].curves.attrs.get("confidence")).lower()
    entries = [("spread", "spread"), ("band", f"its {band}"), ("law", "fitted law")]
    for position, limit in enumerate(panels[0].limits):
        same = {panel.limits[position].threshold for panel in panels}
        words = criterion_text(limit) if len(same) == 1 else limit.criterion
        entries.append((colour_of(position), wrapped(words, 420, 8.5, most=1)[0]))
    return entries


def _set_out(entries: Sequence[tuple[str, str]], room: float) -> list[list[tuple[float, str, str]]]:
    rows: list[list[tuple[float, str, str]]] = [[]]
    x = 0.0
    for kind, words in entries:
        need = 54 + len(words) * 7.9
        if rows[-1] and x + need > room:
            rows.append([])
            x = 0.0
        rows[-1].append((x, kind, words))
        x += need
    return rows


def _legend(sheet: Sheet, rows: list[list[tuple[float, str, str]]], top: float) -> None:
    for position, row in enumerate(rows):
        for x, kind, words in row:
            upper = top + 22 * position
            y = 1 - (upper + 8) / sheet.height
            ends = [(20 + x) / sheet.width, (20 + x + 26) / sheet.width]
            if kind == "band":
                corner = (ends[0], y - 6 / sheet.height)
                sheet.figure.add_artist(
                    Rectangle(
                        corner, ends[1] - ends[0], 12 / sheet.height, facecolor=BAND, linewidth=0
                    )
                )
            else:
                colour = {"spread": INK, "law": LAW_INK}.get(kind, kind)
                sheet.figure.add_artist(
                    Line2D(
                        ends,
                        [y, y],
                        color=colour,
                        linewidth=1.7,
                        linestyle=(0, (4, 2)) if kind == "law" else "-",
                    )
                )
            sheet.text(20 + x + 33, upper, words, size=8.5)


def _strip_note(panels: Sequence[Panel]) -> str:
    note = "Below each curve: the limit of each criterion (diamond) and its interval (bar)."
    limits: list[Limit] = [limit for panel in panels for limit in panel.limits]
    if any(limit.status == Status.beyond_run for limit in limits):
        note += " An arrow at the right: beyond the end of the run."
    return note
