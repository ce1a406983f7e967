"""A map with all that a reader needs beside it: legend, scale, names of places, and words."""

from __future__ import annotations

import hashlib
from collections.abc import Iterator
from dataclasses import dataclass
from functools import cache
from itertools import groupby

import numpy as np
import xarray as xr

from ensemble_horizon.products.hour_scale import HourScale
from ensemble_horizon.products.limits import VariableResult
from ensemble_horizon.products.map_legend import MapField, legend_entries, map_notes, status_shares
from ensemble_horizon.products.maps import map_content, map_criterion, shared_scales
from ensemble_horizon.products.page.map_picture import (
    Label,
    MapPicture,
    map_picture,
    percent,
    swatch,
)
from ensemble_horizon.products.page.policy import data_uri, embedded_json
from ensemble_horizon.products.page.readings import (
    Raster,
    grid_reading,
    map_reading,
    raster_of,
)
from ensemble_horizon.products.places import Ground
from ensemble_horizon.products.view import MapView, map_view
from ensemble_horizon.products.wording import duration, interval_name, lead_number, lead_units
from ensemble_horizon.vocabulary import CRITERION, START, Status

_LONGEST_NAME = 26
_NOTE_WIDTH = 1_000_000


@dataclass(frozen=True)
class Step:
    """A colour of the scale: its place and width in percent, and the bound at its left."""

    x: float
    width: float
    colour: str


@dataclass(frozen=True)
class Outline:
    """A region or site on the map: a path in percent of the picture, and its name."""

    path: str
    site: Label | None
    name: Label
    leftward: bool


@dataclass(frozen=True)
class MapFigure:
    """One map of the page."""

    number: int
    variable: str
    long_name: str
    criterion: str
    criterion_words: str
    picture: MapPicture
    source: str
    outlines: tuple[Outline, ...]
    steps: tuple[Step, ...]
    bounds: tuple[Label, ...]
    units: str
    legend: tuple[tuple[str, str], ...]
    notes: tuple[str, ...]
    words: str
    grid: str
    thinned: bool
    reading: str


@dataclass(frozen=True)
class MapPart:
    """All maps of the page, and the grids they share: (id, JSON)."""

    figures: tuple[MapFigure, ...]
    grids: tuple[tuple[str, str], ...]

    @property
    def thinned(self) -> bool:
        """Whether a map reads out fewer grid points than there are."""
        return any(figure.thinned for figure in self.figures)

    @property
    def by_variable(self) -> list[tuple[str, list[MapFigure]]]:
        """The maps of each variable under its long name."""
        groups = groupby(self.figures, key=lambda figure: (figure.variable, figure.long_name))
        return [(key[1], list(figures)) for key, figures in groups]


def map_part(results: tuple[VariableResult, ...], ground: Ground) -> MapPart:
    """Return the maps of all variables and criteria; a grid that maps share is told once.

    Maps of the same lead units share a scale: the same colour is the same lead all over the page.
    """
    figures: list[MapFigure] = []
    grids: dict[str, str] = {}
    scales = shared_scales(_all_contents(results))
    for result in results:
        if result.maps is None:
            continue
        maps = result.maps.isel({START: 0}).compute()
        view = map_view(maps["horizon"].isel({CRITERION: 0}))
        raster = raster_of(view)
        told = embedded_json(grid_reading(view, raster))
        grid = f"grid-{hashlib.sha256(told.encode()).hexdigest()[:8]}"
        grids[grid] = told
        for one in _criteria(maps, result):
            scale = scales[lead_units(map_content(one).units)]
            figures.append(_figure(len(figures) + 1, one, view, raster, grid, ground, scale))
    return MapPart(tuple(figures), tuple(grids.items()))


def _all_contents(results: tuple[VariableResult, ...]) -> Iterator[MapField]:
    for result in results:
        if result.maps is not None:
            maps = result.maps.isel({START: 0})
            for column in range(maps.sizes[CRITERION]):
                yield map_content(maps.isel({CRITERION: column}).compute())


def _criteria(maps: xr.Dataset, result: VariableResult) -> Iterator[xr.Dataset]:
    members = result.curves.get("members")
    if members is not None and members.size and "members" not in maps.attrs:
        maps = maps.assign_attrs(members=int(members.max()))
    for column in range(maps.sizes[CRITERION]):
        yield maps.isel({CRITERION: column})


def _figure(
    number: int,
    one: xr.Dataset,
    view: MapView,
    raster: Raster,
    grid: str,
    ground: Ground,
    scale: HourScale,
) -> MapFigure:
    content = map_content(one)
    picture = map_picture(view, content, ground, scale)
    size = (picture.width, picture.height)
    shares = status_shares(view, content, *size)
    entries = legend_entries(content, shares)
    long_name = str(one.attrs.get("long_name", one.attrs.get("variable", "variable")))
    last_lead = content.last_lead or float(np.nanmax(content.horizon, initial=1.0))
    return MapFigure(
        number=number,
        variable=str(one.attrs.get("variable", "variable")),
        long_name=long_name,
        criterion=str(one[CRITERION].values),
        criterion_words=map_criterion(one),
        picture=picture,
        source=data_uri(picture.png),
        outlines=tuple(_outlines(view, ground, picture)),
        # A map without a number has no scale.
        steps=tuple(_steps(picture)) if Status.reached in content.status else (),
        bounds=tuple(_bounds(picture, content.units)),
        units=lead_units(content.units),
        legend=tuple((_swatch_source(status), words) for status, words in entries),
        notes=tuple(map_notes(content, _NOTE_WIDTH)[:-1]),
        words=_words(view, content, [words for _, words in entries], size, long_name, one),
        grid=grid,
        thinned=raster.thinned,
        reading=embedded_json(
            map_reading(content, raster, last_lead)
            | {
                "grid": grid,
                "units": lead_units(content.units),
                "hours": lead_units(content.units) == "h",
                "interval": interval_name(content.confidence).lower(),
                "words": _status_words(content),
            }
        ),
    )


def _status_words(content: MapField) -> list[str]:
    words = [content.words.get(status, "") for status in Status]
    if content.last_lead is not None:
        beyond = duration(content.last_lead, content.units)
        words[Status.beyond_run] += f" (> {beyond})"
    return words


def _words(
    view: MapView,
    content: MapField,
    entries: list[str],
    size: tuple[int, int],
    long_name: str,
    one: xr.Dataset,
) -> str:
    """Say in words what the picture shows: shares of area, the middle, the shortest and where."""
    parts = [
        f"Map of the limit of {long_name}, {map_criterion(one)}.",
        f"Share of the area: {'; '.join(entries)}.",
    ]
    values = np.where(content.status == Status.reached, content.horizon, np.nan)
    if np.isfinite(values).any():
        points = view.grid_points(*size)
        weights = np.broadcast_to(view.area_weights(*size), points.shape)
        area = np.bincount(points[points >= 0], weights[points >= 0], minlength=values.size)
        middle = _weighted_median(values, area)
        shortest = int(np.nanargmin(values))
        where = position_words(
            float(view.x.flat[shortest]), float(view.y.flat[shortest]), view.geographic
        )
        parts.append(f"Median of the limit by area: {duration(middle, content.units)}.")
        parts.append(f"Shortest: {duration(values[shortest], content.units)}, at {where}.")
    return " ".join(parts)


def _weighted_median(values: np.ndarray, weights: np.ndarray) -> float:
    known = np.isfinite(values) & (weights > 0)
    if not known.any():
        return float(np.nanmedian(values))
    order = np.argsort(values[known], kind="stable")
    sums = np.cumsum(weights[known][order])
    return float(values[known][order][np.searchsorted(sums, sums[-1] / 2)])


def position_words(x: float, y: float, geographic: bool) -> str:
    """Return a position as people read it.

    Examples
    --------
    >>> position_words(224.2, -42.25, True)
    '42.25°S 135.80°W'
    """
    if not geographic:
        return f"x {x:.6g}, y {y:.6g}"
    turned = (x + 180.0) % 360.0 - 180.0
    north, east = "N" if y >= 0 else "S", "E" if turned >= 0 else "W"
    return f"{abs(y):.2f}°{north} {abs(turned):.2f}°{east}"


def _steps(picture: MapPicture) -> Iterator[Step]:
    count = len(picture.scale.colours)
    for number, colour in enumerate(picture.scale.colours):
        red, green, blue = (int(part) for part in colour)
        yield Step(
            round(100 * number / count, 3),
            round(100 / count, 3),
            f"#{red:02x}{green:02x}{blue:02x}",
        )


def _bounds(picture: MapPicture, units: str) -> Iterator[Label]:
    scale = picture.scale
    last = len(scale.bounds) - 1
    for number, bound in enumerate(scale.bounds):
        below, above = number == 0 and scale.below, number == last and scale.above
        sign = "≤ " if below else "≥ " if above else ""
        yield Label(round(100 * number / last, 3), 0.0, f"{sign}{lead_number(bound, units)}")


def _outlines(view: MapView, ground: Ground, picture: MapPicture) -> Iterator[Outline]:
    for mark in ground.marks:
        name = mark.name
        if len(name) > _LONGEST_NAME:
            name = f"{name[: _LONGEST_NAME - 1]}…"
        for x, y in mark.shifted(view.west, view.east):
            if y.max() < view.south or y.min() > view.north:
                continue
            places = [percent(view, *pair) for pair in zip(x, y, strict=True)]
            across, down = zip(*places, strict=True)
            left, right = max(min(across), 0.0), min(max(across), 100.0)
            top = min(max(min(down), 0.0), 100.0)
            site = len(places) == 1
            # As much room as the name takes on the smallest screen.
            leftward = left + 2.4 * len(name) > 100
            path = "" if site else "M" + "L".join(f"{a:g} {b:g}" for a, b in places)
            at = Label(right if leftward else left, top, name)
            yield Outline(path, Label(left, top, name) if site else None, at, leftward)


@cache
def _swatch_source(status: Status) -> str:
    return data_uri(swatch(status))
