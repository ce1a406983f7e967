"""What every map stands on: coasts, meridians and parallels, outlines and sites."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
from matplotlib.axes import Axes
from matplotlib.collections import LineCollection
from matplotlib.patheffects import withStroke

from ensemble_horizon.products.coast import coastlines
from ensemble_horizon.products.places import Ground, PlaceMark
from ensemble_horizon.products.view import MapView

_PLACE_INK = "#8a2517"


def draw_ground(axes: Axes, view: MapView, ground: Ground, width: int) -> list[tuple[float, float]]:
    """Draw coasts, outlines and sites; return where the names of the places stand."""
    if ground.coastline and view.geographic:
        _draw_shore(axes, view, width)
    return _draw_places(axes, view, ground.marks, width)


def _draw_shore(axes: Axes, view: MapView, width: int) -> None:
    wide = view.east - view.west
    shore = coastlines(view.west, view.east, view.south, view.north, smallest=2 * wide / width)
    line = 0.45 if wide > 120 else 0.65
    for colour, extra, faint in (("#ffffff", 0.8, 0.5), ("#14191d", 0.0, 1.0)):
        axes.add_collection(
            LineCollection(shore, colors=colour, linewidths=line + extra, alpha=faint, zorder=2),
            autolim=False,
        )


def _draw_places(
    axes: Axes, view: MapView, places: Sequence[PlaceMark], width: int
) -> list[tuple[float, float]]:
    """Draw outlines and sites with their names, inside the map; return where the names stand."""
    pixel = (view.east - view.west) / width
    glow = [withStroke(linewidth=2.4, foreground="white")]
    named: list[tuple[float, float]] = []
    for place in places:
        for x, y in place.shifted(view.west, view.east):
            outline = len(x) > 1
            if outline:
                axes.plot(x, y, color="white", linewidth=2.8, zorder=4, alpha=0.85)
                axes.plot(x, y, color=_PLACE_INK, linewidth=1.3, zorder=4)
            else:
                axes.plot(
                    x, y, "o", markersize=5.5, color=_PLACE_INK, markeredgecolor="white", zorder=5
                )
            left, right = max(float(x.min()), view.west), min(float(x.max()), view.east)
            top = min(float(y.max()), view.north)
            leftward = left + (len(place.name) * 8.6 + 14) * pixel > view.east
            axes.annotate(
                place.name,
                (right if leftward else left, top),
                xytext=(-5 if leftward else 5, -4 if outline else 4),
                textcoords="offset points",
                fontsize=8,
                color=_PLACE_INK,
                fontweight="bold",
                ha="right" if leftward else "left",
                va="top" if outline else "center",
                path_effects=glow,
                zorder=6,
                parse_math=False,
            )
            half = (len(place.name) * 4.3 + 6) * pixel
            named += [(right - half if leftward else left + half, top), (left, top)]
    return named


def draw_graticule(axes: Axes, view: MapView, size: tuple[int, int]) -> None:
    """Cut the axes to the window and draw meridians and parallels."""
    axes.set(xlim=(view.west, view.east), ylim=(view.south, view.north))
    if not view.geographic:
        axes.set_yticks([] if len(view.shape) == 1 else axes.get_yticks()[1:-1])
        return
    columns = _ticks(view.west, view.east, max(size[0] // 80, 2))
    rows = _ticks(view.south, view.north, max(size[1] // 75, 2))
    axes.set_xticks(columns, [_meridian(value) for value in columns])
    axes.set_yticks(rows, [_parallel(value) for value in rows])
    axes.grid(color="#000000", alpha=0.14, linewidth=0.5, zorder=1.5)


def _ticks(low: float, high: float, most: int) -> np.ndarray:
    steps = (0.01, 0.02, 0.05, 0.1, 0.2, 0.5, 1, 2, 5, 10, 15, 20, 30, 45, 60, 90)
    fitting = [step for step in steps if (high - low) / step <= most]
    step = fitting[0] if fitting else steps[-1]
    first, last = np.ceil(low / step - 1e-6), np.floor(high / step + 1e-6)
    return np.asarray(np.arange(first, last + 1) * step)


def _meridian(value: float) -> str:
    turned = round((value + 180) % 360 - 180, 4)
    if abs(turned) in (0, 180):
        return f"{abs(turned):.0f}°"
    return f"{abs(turned):g}°{'E' if turned > 0 else 'W'}"


def _parallel(value: float) -> str:
    rounded = round(value, 4)
    return f"{abs(rounded):g}°{'N' if rounded > 0 else 'S' if rounded < 0 else ''}"
