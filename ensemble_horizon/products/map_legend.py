"""What stands around a map: colour bar, legend of statuses with their share of area, notes."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field

import numpy as np

from ensemble_horizon.products.hour_scale import HourScale, ramp, status_colours
from ensemble_horizon.products.sheet import INK, Sheet, wrapped
from ensemble_horizon.products.view import MapView
from ensemble_horizon.products.wording import duration, interval_name, lead_number, lead_units
from ensemble_horizon.vocabulary import CAUTION, Status

STATUS_WORDS = {
    Status.beyond_run: "beyond the run",
    Status.at_start: "reached at the first lead",
    Status.no_growth: "no growth, so no limit",
    Status.no_data: "too little known",
}
_BAR = 18


@dataclass(frozen=True)
class MapField:
    """One map to draw: flat fields, and the words that go with them."""

    horizon: np.ndarray
    status: np.ndarray
    low: np.ndarray | None
    high: np.ndarray | None
    units: str
    confidence: float | None
    last_lead: float | None
    title: str
    subtitle: str
    words: Mapping[Status, str] = field(default_factory=lambda: STATUS_WORDS)


def draw_colour_bar(
    sheet: Sheet, scale: HourScale, left: float, top: float, height: float, units: str
) -> None:
    """Draw the steps upright beside the map, the ends pointed where values lie beyond them."""
    short = min(height, 420)
    upper = top + (height - short) / 2 + 14
    axes = sheet.axes(left, upper, _BAR, short - 14)
    count = len(scale.colours)
    axes.imshow(scale.colours[:, None, :], extent=(0, 1, 0, count), aspect="auto", origin="lower")
    axes.set_xticks([])
    axes.yaxis.tick_right()
    signs = ["" for _ in scale.bounds]
    if scale.below:
        signs[0] = "≤ "
    if scale.above:
        signs[-1] = "≥ "
    labels = [
        f"{sign}{lead_number(bound, units)}"
        for sign, bound in zip(signs, scale.bounds, strict=True)
    ]
    axes.set_yticks(np.arange(count + 1), labels, fontsize=8.5, color=INK)
    axes.tick_params(axis="y", length=0, pad=4)
    sheet.text(left - 2, upper - 27, lead_units(units), size=8.5)


def status_shares(view: MapView, content: MapField, width: int, height: int) -> dict[Status, float]:
    """Return the share of the area of the map that each status takes."""
    points = view.grid_points(width, height)
    weights = np.broadcast_to(view.area_weights(width, height), points.shape)[points >= 0]
    codes = content.status[points[points >= 0]].astype(int)
    total = float(weights.sum()) or 1.0
    sums = np.bincount(codes, weights, minlength=len(Status)) / total
    return {status: float(sums[status]) for status in Status}


def legend_entries(content: MapField, shares: dict[Status, float]) -> list[tuple[Status, str]]:
    """Return the statuses that the map shows, each with its words and its share of the area."""
    entries = []
    for status, share in shares.items():
        if share <= 0:
            continue
        percent = "< 1 %" if share < 0.01 else f"{100 * share:.0f} %"
        words = content.words.get(status, "limit within the run")
        if status == Status.beyond_run and content.last_lead is not None:
            words += f" (> {duration(content.last_lead, content.units)})"
        entries.append((status, f"{words}: {percent}"))
    return entries


def legend_rows(
    entries: list[tuple[Status, str]], width: float
) -> list[list[tuple[float, Status, str]]]:
    """Set the entries out in rows no wider than the sheet."""
    rows: list[list[tuple[float, Status, str]]] = [[]]
    x = 0.0
    for status, words in entries:
        need = 46 + len(words) * 7.9
        if rows[-1] and x + need > width:
            rows.append([])
            x = 0.0
        rows[-1].append((x, status, words))
        x += need
    return rows


def draw_legend(
    sheet: Sheet, rows: list[list[tuple[float, Status, str]]], top: float, left: float = 20
) -> None:
    """Draw the rows of the legend, the first of them at ``left``, ``top`` pixels."""
    for number_of_row, row in enumerate(rows):
        for x, status, words in row:
            upper = top + 24 * number_of_row
            rows_of_swatch, columns = np.mgrid[0:15, 0:28]
            if status == Status.reached:
                picture = ramp(28)[columns]
            else:
                picture = status_colours(status, rows_of_swatch, columns)
            sheet.swatch(left + x, upper, picture)
            sheet.text(left + x + 34, upper + 1, words, size=8.5)


def map_notes(content: MapField, width: float) -> list[str]:
    """Return the note on the intervals and the caution, broken into lines."""
    notes = []
    reached = content.status == Status.reached
    if content.low is not None and content.high is not None:
        below = (content.horizon - content.low)[reached]
        above = (content.high - content.horizon)[reached]
        if np.isfinite(below).any() and (above >= 0).any():
            unit = lead_units(content.units)
            down = lead_number(float(np.nanmedian(below)), content.units)
            middle = float(np.nanmedian(above))
            up = "past the end of the run"
            if np.isfinite(middle):
                up = f"{lead_number(middle, content.units)} {unit} above"
            name = interval_name(content.confidence)
            words = f"{name} of the limit, median over the map: from {down} {unit} below to {up}."
            notes += wrapped(words, width, 7.5)
    return notes + wrapped(CAUTION, width, 7.5)
