"""A map as a picture that fills its box to the rim; names and scales stand around it in HTML."""

from __future__ import annotations

import io
from collections.abc import Iterator
from dataclasses import dataclass

import numpy as np
from matplotlib.axes import Axes
from matplotlib.image import imsave

from ensemble_horizon.products.hour_scale import HourScale, ramp, status_colours
from ensemble_horizon.products.isolines import label_places
from ensemble_horizon.products.map_ground import draw_graticule, draw_ground
from ensemble_horizon.products.map_legend import MapField
from ensemble_horizon.products.maps import SOFTWARE, draw_contours, paint_map
from ensemble_horizon.products.places import Ground
from ensemble_horizon.products.sheet import DPI, Sheet
from ensemble_horizon.products.view import MapView
from ensemble_horizon.products.wording import lead_number, number
from ensemble_horizon.vocabulary import Status

_WIDEST, _HIGHEST = 960, 800
# A letter and a line of a name, in widths and heights of a map as it is shown.
_LETTER, _LINE = 0.014, 0.03


@dataclass(frozen=True)
class Label:
    """Words at a place of the picture, in percent of its width and height from the top left."""

    x: float
    y: float
    words: str


@dataclass(frozen=True)
class MapPicture:
    """The picture as PNG, its size in pixels, and what is written on and beside it."""

    png: bytes
    width: int
    height: int
    scale: HourScale
    contours: tuple[Label, ...]
    meridians: tuple[Label, ...]
    parallels: tuple[Label, ...]


def map_picture(view: MapView, content: MapField, ground: Ground, scale: HourScale) -> MapPicture:
    """Draw a map to the rim of its picture: colours, hatches, coasts, lines of equal lead time."""
    size = view.pixel_size(_WIDEST, _HIGHEST)
    width, height = size
    sheet = Sheet(width, height)
    axes = sheet.axes(0, 0, width, height)
    values = np.where(content.status == Status.reached, content.horizon, np.nan)
    paint_map(axes, view, values, content.status, scale, size)
    draw_ground(axes, view, Ground((), ground.coastline), width)
    lines = draw_contours(axes, view, values, scale, size)
    # As many meridians as have room for their labels where the picture is shown small.
    draw_graticule(axes, view, (width // 2, height // 2))
    for spine in axes.spines.values():
        spine.set_visible(False)
    axes.tick_params(length=0)
    contours = tuple(
        Label(*percent(view, x, y), lead_number(level, content.units))
        for level, x, y in label_places(lines, view, clear_of=list(_named(view, ground)))
    )
    picture = io.BytesIO()
    sheet.figure.savefig(
        picture,
        format="png",
        dpi=DPI,
        metadata={"Software": SOFTWARE},
        pil_kwargs={"compress_level": 6},
    )
    return MapPicture(
        picture.getvalue(), width, height, scale, contours, *_graticule_labels(axes, view)
    )


def percent(view: MapView, x: float, y: float) -> tuple[float, float]:
    """Return a position of the window in percent of the picture from the top left."""
    across = (x - view.west) / (view.east - view.west)
    down = (view.north - y) / (view.north - view.south)
    return round(100 * across, 2), round(100 * down, 2)


def _named(view: MapView, ground: Ground) -> Iterator[tuple[float, float]]:
    """Yield where names of places stand: begin, middle and end."""
    letter = _LETTER * (view.east - view.west)
    line = _LINE * (view.north - view.south)
    for mark in ground.marks:
        for x, y in mark.shifted(view.west, view.east):
            left, top = max(float(x.min()), view.west), min(float(y.max()), view.north)
            level = top if len(x) == 1 else top - line
            for part in (0.0, 0.5, 1.0):
                yield left + part * len(mark.name) * letter, level


def swatch(status: Status) -> bytes:
    """Return a small picture of how a status is painted, as PNG."""
    rows, columns = np.mgrid[0:16, 0:32]
    pixels = (
        ramp(32)[columns] if status == Status.reached else status_colours(status, rows, columns)
    )
    picture = io.BytesIO()
    imsave(picture, np.ascontiguousarray(pixels), format="png", metadata={"Software": SOFTWARE})
    return picture.getvalue()


def _graticule_labels(axes: Axes, view: MapView) -> tuple[tuple[Label, ...], tuple[Label, ...]]:
    def words(ticks: np.ndarray, labels: list[str]) -> list[str]:
        # Axes of a plain plane have no words of their own before they are drawn.
        return [text or number(float(tick)) for tick, text in zip(ticks, labels, strict=True)]

    columns, rows = axes.get_xticks(), axes.get_yticks()
    across = words(columns, [label.get_text() for label in axes.get_xticklabels()])
    down = words(rows, [label.get_text() for label in axes.get_yticklabels()])
    meridians = tuple(
        Label(percent(view, tick, view.north)[0], 0.0, text)
        for tick, text in zip(columns, across, strict=True)
        if view.west <= tick <= view.east
    )
    parallels = tuple(
        Label(0.0, percent(view, view.west, tick)[1], text)
        for tick, text in zip(rows, down, strict=True)
        if view.south <= tick <= view.north
    )
    return meridians, parallels
