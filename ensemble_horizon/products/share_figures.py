"""Time to the limit over many starts: the share of them still usable at each lead."""

from __future__ import annotations

import os
from collections.abc import Sequence
from dataclasses import dataclass
from pathlib import Path

import xarray as xr
from matplotlib.axes import Axes
from matplotlib.lines import Line2D

from ensemble_horizon.products.curve_panel import lead_locator
from ensemble_horizon.products.gains_figure import FURTHER_A, FURTHER_B
from ensemble_horizon.products.sheet import FAINT, INK, SOFT_INK, Sheet, line_height, wrapped
from ensemble_horizon.products.wording import (
    duration,
    interval_name,
    lead_units,
    with_units,
)
from ensemble_horizon.vocabulary import CAUTION, CRITERION, LEAD, PLACE

SOFTWARE = "Ensemble Horizon"
MOST_PANELS = 12
_WIDTH, _HEIGHT, _GAP, _MARGIN, _BELOW = 330, 150, 62, 62, 36
_TITLE = 60
_STYLES: tuple[tuple[str, object], ...] = ((FURTHER_A, (0, (5, 2))), (FURTHER_B, "-"))


@dataclass(frozen=True)
class Curves:
    """Time to the limit of one variable, once or under several versions.

    parts : datasets of `time_to_limit`, dimensions (lead, place, criterion)
    labels : name of each; one empty name where there is one only
    when : which starts
    """

    parts: tuple[xr.Dataset, ...]
    labels: tuple[str, ...]
    when: str


def draw_shares(curves: Curves, path: str | os.PathLike[str]) -> list[Path]:
    """Draw the share of starts still usable as PNG, one panel for each place and criterion.

    Parameters
    ----------
    curves : Curves
    path : path
        The first picture; after twelve panels a next one follows, with ``_2`` in its name.

    Returns
    -------
    list of pathlib.Path

    Raises
    ------
    ProductError
        If a picture cannot be written.
    """
    first = curves.parts[0]
    panels = [
        (place, criterion)
        for place in range(first.sizes[PLACE])
        for criterion in range(first.sizes[CRITERION])
    ]
    target = Path(path)
    written = []
    for number, begin in enumerate(range(0, len(panels), MOST_PANELS), start=1):
        name = target if number == 1 else target.with_stem(f"{target.stem}_{number}")
        written.append(_draw_sheet(curves, panels[begin : begin + MOST_PANELS], name))
    return written


def _draw_sheet(curves: Curves, panels: Sequence[tuple[int, int]], path: Path) -> Path:
    first = curves.parts[0]
    columns = 1 if len(panels) == 1 else 2 if len(panels) <= 4 else 3
    rows = -(-len(panels) // columns)
    width = max(_MARGIN + columns * (_WIDTH + _GAP) - _GAP + 30, 560)
    room = width - 40
    words = f"For how long starts stay usable: {first.attrs['long_name']}"
    title = wrapped(words, room, 13.5, most=2, bold=True)
    unit = lead_units(str(first.attrs["lead_units"]))
    subtitle = wrapped(f"{curves.when}   ·   lead in {unit}", room, 9, most=2)
    note = "Share of starts whose limit is later than the lead (Kaplan and Meier)"
    if any("share_low" in part and part["share_low"].notnull().any() for part in curves.parts):
        note += f", with its {interval_name(first.attrs['confidence']).lower()}"
    notes = wrapped(f"{note}.", room, 7.5) + wrapped(CAUTION, room, 7.5)
    head = 16 + len(title) * line_height(13.5) + len(subtitle) * line_height(9) + 8
    legend = 24 if any(curves.labels) else 0
    each = _TITLE + _HEIGHT + _BELOW
    foot = head + legend + rows * each + 4
    sheet = Sheet(int(width), int(foot + len(notes) * line_height(7.5) + 12))
    sheet.text(20, 16, "\n".join(title), size=13.5, weight="bold")
    lower = 18 + len(title) * line_height(13.5)
    sheet.text(20, lower, "\n".join(subtitle), size=9, colour=SOFT_INK)
    if legend:
        _legend(sheet, curves.labels, head)
    for position, (place, criterion) in enumerate(panels):
        row, column = divmod(position, columns)
        left, top = _MARGIN + column * (_WIDTH + _GAP), head + legend + row * each
        _panel(sheet, curves, place, criterion, (left, top))
    sheet.text(20, foot, "\n".join(notes), size=7.5, colour=SOFT_INK)
    return sheet.save(path, software=SOFTWARE)


def _panel(
    sheet: Sheet, curves: Curves, place: int, criterion: int, corner: tuple[float, float]
) -> None:
    left, top = corner
    first = curves.parts[0].isel({PLACE: place, CRITERION: criterion})
    words = str(first[CRITERION].values)
    if str(first["criterion_kind"].values) == "tolerance":
        words = with_units(words, str(first["threshold_units"].values))
    name = wrapped(str(first[PLACE].values), _WIDTH, 10, most=1, bold=True)[0]
    sheet.text(left, top + 8, name, size=10, weight="bold")
    sheet.text(left, top + 26, wrapped(words, _WIDTH, 8, most=1)[0], size=8)
    axes = sheet.axes(left, top + _TITLE, _WIDTH, _HEIGHT)
    _frame(axes, curves.parts)
    halves = []
    for part, label, (colour, dashes) in zip(
        curves.parts, curves.labels, _styles(len(curves.parts)), strict=True
    ):
        one = part.isel({PLACE: place, CRITERION: criterion})
        lead, share = one[LEAD].values, one["share"].values
        axes.fill_between(
            lead, one["share_low"].values, one["share_high"].values,
            color=colour, alpha=0.16, linewidth=0, zorder=2, step="post",
        )  # fmt: skip
        axes.plot(
            lead,
            share,
            color=colour,
            linewidth=1.8,
            linestyle=dashes,
            zorder=4,
            drawstyle="steps-post",
        )
        halves.append(f"{label} {_half(one)}".strip())
    known = any(
        int(part.isel({PLACE: place, CRITERION: criterion})["starts"]) for part in curves.parts
    )
    text = "half of them by: " + ", ".join(halves) if known else "no data"
    sheet.text(
        left, top + 41, wrapped(text, _WIDTH + 30, 7.5, most=1)[0], size=7.5, colour=SOFT_INK
    )


def _half(one: xr.Dataset) -> str:
    """Return the median in words."""
    units = str(one.attrs["lead_units"])
    median = one.sel(quantile=0.5)
    if int(one["starts"]) == 0:
        return "no data"
    names = str(median["limit_status"].attrs["flag_meanings"]).split()
    status = names[int(median["limit_status"])]
    if status == "reached":
        return duration(float(median["limit"]), units)
    return {"at_start": "the first lead"}.get(status, "later than the run")


def _styles(count: int) -> Sequence[tuple[str, object]]:
    return _STYLES if count > 1 else ((INK, "-"),)


def _frame(axes: Axes, parts: Sequence[xr.Dataset]) -> None:
    first = float(parts[0][LEAD].values[0])
    last = max(float(part[LEAD].values[-1]) for part in parts)
    axes.set(xlim=(first, last), ylim=(0, 1.02))
    axes.set_yticks([0, 0.25, 0.5, 0.75, 1.0], ["0", "", "50 %", "", "100 %"])
    axes.xaxis.set_major_locator(lead_locator(first, last, str(parts[0].attrs["lead_units"])))
    axes.grid(color=FAINT, linewidth=0.6)
    axes.set_axisbelow(True)


def _legend(sheet: Sheet, labels: Sequence[str], top: float) -> None:
    x = 20.0
    for label, (colour, dashes) in zip(labels, _styles(len(labels)), strict=True):
        y = 1 - (top + 9) / sheet.height
        ends = [x / sheet.width, (x + 34) / sheet.width]
        sheet.figure.add_artist(
            Line2D(ends, [y, y], color=colour, linewidth=1.9, linestyle=dashes)  # type: ignore[arg-type]
        )
        words = wrapped(label, 300, 8.5, most=1)[0]
        sheet.text(x + 42, top + 1, words, size=8.5)
        x += 70 + len(words) * 7.9
