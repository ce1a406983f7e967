"""Horizon maps: how far ahead the criterion holds, at every grid point, as a picture."""

from __future__ import annotations

import os
from collections.abc import Iterable
from pathlib import Path

import numpy as np
import xarray as xr
from matplotlib.axes import Axes
from matplotlib.collections import LineCollection
from matplotlib.patheffects import withStroke

from ensemble_horizon.checks import require_dimension
from ensemble_horizon.products.hour_scale import HourScale, hour_scale, status_colours
from ensemble_horizon.products.isolines import contour_lines, label_places
from ensemble_horizon.products.limits import lead_axis
from ensemble_horizon.products.map_ground import draw_graticule, draw_ground
from ensemble_horizon.products.map_legend import (
    STATUS_WORDS,
    MapField,
    draw_colour_bar,
    draw_legend,
    legend_entries,
    legend_rows,
    map_notes,
    status_shares,
)
from ensemble_horizon.products.places import BARE, Ground
from ensemble_horizon.products.sheet import INK, SOFT_INK, Sheet, line_height, wrapped
from ensemble_horizon.products.view import MapView, map_view
from ensemble_horizon.products.wording import (
    criterion_words,
    is_pooled,
    lead_number,
    lead_units,
    rule_words,
    start_text,
    with_units,
)
from ensemble_horizon.vocabulary import CRITERION, START, Status

SOFTWARE = "Ensemble Horizon"
_WIDEST, _HIGHEST, _NARROWEST = 1020, 690, 620
_LEFT, _RIGHT = 64, 118


def draw_horizon_map(
    maps: xr.Dataset,
    path: str | os.PathLike[str],
    *,
    start: int = 0,
    criterion: int = 0,
    ground: Ground = BARE,
    members: int | None = None,
    last_lead: float | None = None,
    view: MapView | None = None,
) -> Path:
    """Draw the map of one start and criterion as PNG.

    Parameters
    ----------
    maps : xarray.Dataset
        Maps of one variable, dimensions (start, criterion, *space).
    path : path
        The picture to write.
    start, criterion : int
        Positions to draw.
    ground : Ground
        Outlines of regions and marks of sites.
    members : int, optional
        Number of members, for the title; ``maps.attrs["members"]`` otherwise.
    last_lead : float, optional
        End of the run, for the legend; the last ``lead`` of the maps or
        ``maps.attrs["last_lead"]`` otherwise.
    view : MapView, optional
        View of the same grid from an earlier picture, which saves finding it again.

    Raises
    ------
    ArgumentError
        If the maps lack a dimension, or their grid cannot be drawn.
    ProductError
        If the picture cannot be written.
    """
    for dimension in (START, CRITERION):
        require_dimension(maps, dimension, "maps")
    one = maps.isel({START: start, CRITERION: criterion}).compute()
    view = view or map_view(one["horizon"])
    content = map_content(one, members, last_lead)
    width, height = view.pixel_size(_WIDEST, _HIGHEST)
    body = max(width, _NARROWEST)
    total = body + _LEFT + _RIGHT
    title = wrapped(content.title, total - 40, 13.5, most=2, bold=True)
    subtitle = wrapped(content.subtitle, total - 40, 9.5, most=3)
    top = 18 + len(title) * line_height(13.5) + len(subtitle) * line_height(9.5) + 14
    entries = legend_entries(content, status_shares(view, content, width, height))
    rows = legend_rows(entries, total - 40)
    notes = map_notes(content, total - 40)
    legend = top + height + 36
    below = len(rows) * 24 + 10 + len(notes) * line_height(7.5) + 14
    sheet = Sheet(int(total), int(legend + below))
    sheet.text(20, 16, "\n".join(title), size=13.5, weight="bold")
    lower = 16 + len(title) * line_height(13.5) + 2
    sheet.text(20, lower, "\n".join(subtitle), size=9.5, colour=SOFT_INK)
    left = _LEFT + (body - width) // 2
    draw_field(sheet, view, content, (left, top, width, height), ground)
    draw_legend(sheet, rows, legend)
    caution_top = legend + len(rows) * 24 + 8
    sheet.text(20, caution_top, "\n".join(notes), size=7.5, colour=SOFT_INK)
    return sheet.save(Path(path), software=SOFTWARE)


def draw_field(
    sheet: Sheet,
    view: MapView,
    content: MapField,
    box: tuple[float, float, int, int],
    ground: Ground,
    scale: HourScale | None = None,
) -> Axes:
    """Draw one map with its colour bar at ``box``: left, top, width and height in pixels.

    ``scale`` is that of several maps side by side; otherwise the map has its own.
    """
    left, top, width, height = box
    axes = sheet.axes(left, top, width, height)
    values = np.where(content.status == Status.reached, content.horizon, np.nan)
    scale = scale or hour_scale(values, content.units)
    paint_map(axes, view, values, content.status, scale, (width, height))
    named = draw_ground(axes, view, ground, width)
    lines = draw_contours(axes, view, values, scale, (width, height))
    _label_contours(axes, view, lines, content.units, named)
    draw_graticule(axes, view, (width, height))
    if np.isfinite(values).any():
        draw_colour_bar(sheet, scale, left + width + 22, top, height, content.units)
    return axes


def shared_scales(contents: Iterable[MapField]) -> dict[str, HourScale]:
    """Return one scale for all maps of the same lead units, by those in short."""
    values: dict[str, list[np.ndarray]] = {}
    for content in contents:
        reached = content.horizon[content.status == Status.reached]
        values.setdefault(lead_units(content.units), []).append(reached)
    return {units: hour_scale(np.concatenate(parts), units) for units, parts in values.items()}


def map_content(
    one: xr.Dataset, members: int | None = None, last_lead: float | None = None
) -> MapField:
    """Gather the fields of one start and criterion, and write the title and the line below it."""
    units, end = lead_axis(one)
    last_lead = end if last_lead is None else last_lead
    members = one.attrs.get("members") if members is None else members
    label = str(one["start_label"].values) if "start_label" in one else ""
    parts = [f"Criterion: {map_criterion(one)}"]
    when = start_text(one[START].values[()], label)
    parts.append(when if is_pooled(one[START].values[()], label) else f"start {when}")
    if members is not None:
        parts.append(f"{int(members)} members")
    fields = {
        name: one[name].values.ravel().astype(float) if name in one else None
        for name in ("low", "high")
    }
    return MapField(
        horizon=one["horizon"].values.ravel().astype(float),
        status=one["status"].values.ravel(),
        confidence=one.attrs.get("confidence"),
        low=fields["low"],
        high=fields["high"],
        units=units,
        last_lead=last_lead,
        title=f"How far ahead the forecast holds: {one.attrs.get('long_name', 'variable')}",
        subtitle="   ·   ".join(parts),
        words=STATUS_WORDS | one.attrs.get("status_words", {}),
    )


def map_criterion(one: xr.Dataset) -> str:
    """Return the criterion of a map with its size, as far as that is the same at every point."""
    name = str(one[CRITERION].values)
    kind = str(one["criterion_kind"].values) if "criterion_kind" in one else ""
    units = str(one["threshold_units"].values) if "threshold_units" in one else ""
    rule = str(one["criterion_rule"].values) if "criterion_rule" in one else ""
    size = rule_words(rule, str(one.attrs.get("units", "1")))
    single = "threshold" in one and one["threshold"].ndim == 0 and np.isfinite(one["threshold"])
    if single and not (kind == "chance" and size):
        return criterion_words(name, float(one["threshold"]), units)
    if kind == "tolerance" and (name == rule or not size):
        # The name says the number; only its units are wanting.
        return with_units(name, units)
    if not size:
        return name
    return size if name == rule else f"{name} ({size})"


def paint_map(
    axes: Axes,
    view: MapView,
    values: np.ndarray,
    status: np.ndarray,
    scale: HourScale,
    size: tuple[int, int],
) -> None:
    """Lay the colours and hatches down, one pixel of the picture at a time."""
    width, height = size
    points = view.grid_points(width, height)
    colours = np.full((values.size + 1, 3), 255, dtype=np.uint8)
    colours[:-1] = scale.paint(np.where(np.isfinite(values), values, scale.bounds[0]))
    image = colours[points]
    states = np.append(status, -1)[points]
    for code in STATUS_WORDS:
        here = states == code
        if here.any():
            image[here] = status_colours(code, *np.nonzero(here))
    axes.imshow(
        image,
        extent=(view.west, view.east, view.south, view.north),
        aspect="auto",
        interpolation="nearest",
        zorder=0,
    )


def draw_contours(
    axes: Axes,
    view: MapView,
    values: np.ndarray,
    scale: HourScale,
    size: tuple[int, int],
) -> dict[float, list[np.ndarray]]:
    """Draw the lines of equal lead time and return them by level, as `contour_lines` does."""
    painted = np.append(values, np.nan)[view.grid_points(*size)]
    lines = contour_lines(view, values.reshape(view.shape), painted, scale.contours)
    for found in lines.values():
        if found:
            # Light lines in a dark case: not to be taken for coasts, which are dark.
            case = withStroke(linewidth=2.1, foreground=INK, alpha=0.75)
            axes.add_collection(
                LineCollection(
                    found, colors="#fffdf2", linewidths=1.0, zorder=2.5, path_effects=[case]
                ),
                autolim=False,
            )
    return lines


def _label_contours(
    axes: Axes,
    view: MapView,
    lines: dict[float, list[np.ndarray]],
    units: str,
    taken: list[tuple[float, float]],
) -> None:
    for level, x, y in label_places(lines, view, clear_of=taken):
        axes.text(
            x,
            y,
            lead_number(level, units),
            fontsize=8,
            color=INK,
            ha="center",
            va="center",
            zorder=5,
            bbox={"boxstyle": "round,pad=0.16", "fc": "#ffffffdd", "ec": "none"},
        )
