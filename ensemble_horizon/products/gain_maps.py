"""Maps of hours gained: full colour where a gain survives, a faint weave where it does not."""

from __future__ import annotations

import os
from collections.abc import Sequence
from dataclasses import dataclass
from pathlib import Path

import numpy as np
import xarray as xr
from matplotlib.colors import to_rgb
from scipy import ndimage

from ensemble_horizon.checks import require_dimension
from ensemble_horizon.products.gains import starts_words
from ensemble_horizon.products.hour_scale import STATUS_COLOURS, hour_step
from ensemble_horizon.products.map_ground import draw_graticule, draw_ground
from ensemble_horizon.products.places import BARE, Ground
from ensemble_horizon.products.sheet import INK, SOFT_INK, Sheet, line_height, wrapped
from ensemble_horizon.products.view import MapView, map_view
from ensemble_horizon.products.wording import duration, lead_units, signed, with_units
from ensemble_horizon.vocabulary import CAUTION, CRITERION, Status

SOFTWARE = "Ensemble Horizon"
_WIDEST, _HIGHEST, _NARROWEST = 1020, 690, 620
_LEFT, _RIGHT = 64, 138
_BAR = 20
_MOST_STEPS = 5  # to each side of no gain
# Rust for hours lost, sea green for hours gained; dark at both ends, so that a grey printer keeps
# the size and the outline keeps what survives.
_LOST = ("#f3dcc8", "#e0a172", "#c2592a", "#8a3413", "#561b06")
_GAINED = ("#d3e8e0", "#8cc3b3", "#3f9585", "#0f6158", "#053a35")
_NO_DIFFERENCE = "#fbfaf3"
_PAPER = np.array([250, 250, 248], dtype=float)


@dataclass(frozen=True)
class GainScale:
    """Rising bounds in lead units, symmetric about no gain, and a colour (3,) between each two."""

    bounds: np.ndarray
    colours: np.ndarray

    def paint(self, values: np.ndarray) -> np.ndarray:
        """Return the colours (..., 3) of finite ``values``; the ends take all beyond them."""
        place = np.searchsorted(self.bounds, values, side="right") - 1
        return np.asarray(self.colours[np.clip(place, 0, len(self.colours) - 1)])


def gain_scale(values: np.ndarray, units: str) -> GainScale:
    """Return the scale for a field of gains, in steps that matter on a shift.

    Examples
    --------
    >>> gain_scale(np.array([-2.0, 5.0, 11.0]), "hours").bounds.tolist()
    [-12.0, -9.0, -6.0, -3.0, 0.0, 3.0, 6.0, 9.0, 12.0]
    """
    known = np.abs(values[np.isfinite(values)])
    end = float(np.percentile(known, 99)) if known.size else 0.0
    step = hour_step(0.0, end or 1.0, hours=lead_units(units) == "h", most=_MOST_STEPS)
    count = max(int(np.ceil(end / step - 1e-9)), 2)
    bounds = step * np.arange(-count, count + 1)
    sides = [_between(anchors, count) for anchors in (_LOST, _GAINED)]
    return GainScale(bounds, np.concatenate([sides[0][::-1], sides[1]]))


def draw_gain_map(
    maps: xr.Dataset,
    path: str | os.PathLike[str],
    *,
    criterion: int = 0,
    ground: Ground = BARE,
    view: MapView | None = None,
) -> Path:
    """Draw the hours gained at every grid point for one criterion as PNG.

    Parameters
    ----------
    maps : Dataset (criterion, *space)
        With ``gained`` and ``survives``.
    path : path
        The picture to write.
    criterion : int
        Position to draw.
    ground : Ground
        Outlines of regions and marks of sites.
    view : MapView, optional
        View of the same grid from an earlier picture, which saves finding it again.

    Raises
    ------
    ArgumentError
        If the maps lack a dimension, or their grid cannot be drawn.
    ProductError
        If the picture cannot be written.
    """
    require_dimension(maps, CRITERION, "maps")
    one = maps.isel({CRITERION: criterion}).compute()
    view = view or map_view(one["gained"])
    units = str(one.attrs["lead_units"])
    gained = one["gained"].values.ravel().astype(float)
    survives = one["survives"].values.ravel().astype(bool)
    width, height = view.pixel_size(_WIDEST, _HIGHEST)
    body = max(width, _NARROWEST)
    total = body + _LEFT + _RIGHT
    a, b = one.attrs["version_a"], one.attrs["version_b"]
    words = f"Lead time gained by {b} over {a}: {one.attrs['long_name']}"
    title = wrapped(words, total - 40, 13.5, most=2, bold=True)
    subtitle = wrapped(_subtitle(one), total - 40, 9.5, most=3)
    top = 18 + len(title) * line_height(13.5) + len(subtitle) * line_height(9.5) + 14
    scale = gain_scale(gained, units)
    entries = _entries(view, gained, survives, (width, height), one)
    notes = wrapped(CAUTION, total - 40, 7.5)
    legend = top + height + 36
    foot = legend + 24 * len(entries) + 8
    sheet = Sheet(int(total), int(foot + len(notes) * line_height(7.5) + 14))
    sheet.text(20, 16, "\n".join(title), size=13.5, weight="bold")
    lower = 16 + len(title) * line_height(13.5) + 2
    sheet.text(20, lower, "\n".join(subtitle), size=9.5, colour=SOFT_INK)
    left = _LEFT + (body - width) // 2
    axes = sheet.axes(left, top, width, height)
    axes.imshow(
        _picture(view, scale, gained, survives, (width, height)),
        extent=(view.west, view.east, view.south, view.north),
        aspect="auto",
        interpolation="nearest",
        zorder=0,
    )
    draw_ground(axes, view, ground, width)
    draw_graticule(axes, view, (width, height))
    _bars(sheet, scale, (left + width + 22, top), height, units)
    for position, (picture, text) in enumerate(entries):
        sheet.swatch(20, legend + 24 * position, picture)
        sheet.text(54, legend + 24 * position + 1, text, size=8.5)
    sheet.text(20, foot, "\n".join(notes), size=7.5, colour=SOFT_INK)
    return sheet.save(Path(path), software=SOFTWARE)


def faint(colours: np.ndarray) -> np.ndarray:
    """Return a picture (rows, columns, 3) washed out and woven: what does not survive."""
    rows, columns = np.indices(colours.shape[:2])
    thread = ((rows + columns) % 4 == 0)[..., np.newaxis]
    washed = 0.42 * colours + 0.58 * _PAPER
    return np.asarray(np.where(thread, 0.12 * colours + 0.88 * _PAPER, washed).round(), np.uint8)


def _picture(
    view: MapView,
    scale: GainScale,
    gained: np.ndarray,
    survives: np.ndarray,
    size: tuple[int, int],
) -> np.ndarray:
    """Paint every pixel from the grid point beneath; survivors are full and have a rim."""
    points = view.grid_points(*size)
    values, clear = np.append(gained, np.nan)[points], np.append(survives, False)[points]
    known = np.isfinite(values)
    full = scale.paint(np.where(known, values, 0.0))
    image = np.where(clear[..., np.newaxis], full, faint(full)).astype(np.uint8)
    image[values == 0] = _bytes(_NO_DIFFERENCE)
    image[~known] = _bytes(STATUS_COLOURS[Status.no_data][0])
    image[points < 0] = 255
    rim = clear & ~ndimage.binary_erosion(clear, border_value=1)
    image[rim] = _bytes(INK)
    return image


def _entries(
    view: MapView,
    gained: np.ndarray,
    survives: np.ndarray,
    size: tuple[int, int],
    one: xr.Dataset,
) -> list[tuple[np.ndarray, str]]:
    """Return the pictures and words of the legend, each with its share of the area."""
    points = view.grid_points(*size)
    inside = points >= 0
    weights = np.broadcast_to(view.area_weights(*size), points.shape)[inside]
    values, clear = gained[points[inside]], survives[points[inside]]
    known = np.isfinite(values)
    a, b = one.attrs["version_a"], one.attrs["version_b"]
    blank, gain, loss = STATUS_COLOURS[Status.no_data][0], _GAINED[3], _LOST[2]
    plain = {
        colour: np.broadcast_to(_bytes(colour), (15, 28, 3))
        for colour in (gain, loss, blank, _NO_DIFFERENCE)
    }
    half = np.where(np.arange(28)[:, np.newaxis] < 14, plain[loss], plain[gain])
    end = duration(float(one.attrs["restricted_to"]), str(one.attrs["lead_units"]))
    judged = bool((one["reason"].values == 0).any())
    rest = "not told apart" if judged else "not judged: too few starts, or no scatter between them"
    kinds = [
        (plain[gain], clear & (values > 0), f"{b} holds longer, at a false discovery rate of 10 %"),
        (plain[loss], clear & (values < 0), f"{a} holds longer, at a false discovery rate of 10 %"),
        (faint(half.astype(float)), known & ~clear & (values != 0), rest),
        (plain[_NO_DIFFERENCE], values == 0, f"no difference by the end of the count, {end}"),
        (plain[blank], ~known, "no data under one of the versions"),
    ]  # fmt: skip
    entries = []
    for picture, where, words in kinds:
        share = float(weights[where].sum() / (weights.sum() or 1.0))
        if share > 0:
            percent = "< 1 %" if share < 0.01 else f"{100 * share:.0f} %"
            entries.append((np.asarray(picture, np.uint8), f"{words}: {percent} of the area"))
    return entries


def _bars(
    sheet: Sheet, scale: GainScale, corner: tuple[float, float], height: float, units: str
) -> None:
    """Draw the steps upright beside the map, full and faint side by side."""
    left, top = corner
    short = min(height, 420)
    upper = top + (height - short) / 2 + 18
    count, tall = len(scale.colours), int(short - 18)
    place = np.clip((np.arange(tall) * count) // tall, 0, count - 1)[::-1]
    column = np.broadcast_to(scale.colours[place][:, np.newaxis], (tall, _BAR, 3))
    for shift, picture in ((0, column.astype(np.uint8)), (_BAR, faint(column))):
        axes = sheet.axes(left + shift, upper, _BAR, tall)
        axes.imshow(picture, extent=(0, 1, 0, count), aspect="auto", interpolation="nearest")
        axes.set_xticks([])
        axes.set_yticks([])
    axes.yaxis.tick_right()
    labels = [signed(float(bound), units) for bound in scale.bounds]
    axes.set_yticks(np.arange(count + 1), labels, fontsize=8.5, color=INK)
    axes.tick_params(axis="y", length=0, pad=4)
    sheet.text(left - 2, upper - 27, f"{lead_units(units)} gained", size=8.5)


def _subtitle(one: xr.Dataset) -> str:
    words = str(one[CRITERION].values)
    if str(one["criterion_kind"].values) == "tolerance":
        words = with_units(words, str(one["threshold_units"].values))
    return f"Criterion: {words}   ·   {starts_words(one)}"


def _between(anchors: Sequence[str], count: int) -> np.ndarray:
    """Return ``count`` colours (count, 3) from light to dark."""
    known = np.array([_bytes(colour) for colour in anchors], dtype=float)
    place = np.linspace(0, len(anchors) - 1, count)
    columns = [np.interp(place, np.arange(len(anchors)), part) for part in known.T]
    return np.stack(columns, axis=-1)


def _bytes(colour: str) -> np.ndarray:
    return np.round(255 * np.array(to_rgb(colour))).astype(np.uint8)
