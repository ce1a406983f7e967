"""The figures of an estimate, one record each, so that they can be drawn anywhere.

A drawing holds its own data and can be sent to another process. The plotting library is slow to
load and not needed by those who only want numbers: it loads when the first figure is drawn, or
earlier by `load_plotting`.
"""

from __future__ import annotations

import importlib
from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Protocol

import numpy as np
import xarray as xr

from ensemble_horizon.products.limits import VariableResult, start_labels
from ensemble_horizon.products.netcdf import valid_name
from ensemble_horizon.products.places import Ground
from ensemble_horizon.products.wording import iso_start
from ensemble_horizon.vocabulary import CRITERION, PLACE, START

_MODULES = ("curve_figures", "maps", "view", "score_figures")


def load_plotting() -> None:
    """Load the plotting library, for those who know that they will draw."""
    for name in _MODULES:
        importlib.import_module(f"ensemble_horizon.products.{name}")


class Drawing(Protocol):
    """A figure that can be sent to another process and drawn there."""

    def draw(self) -> None:
        """Draw and write the figure."""


@dataclass(frozen=True)
class CurveDrawing:
    """Growth curves of one variable and start."""

    curves: xr.Dataset
    path: Path

    def draw(self) -> None:
        """Draw and write the figure."""
        from ensemble_horizon.products.curve_figures import draw_growth_curves  # noqa: PLC0415

        draw_growth_curves(self.curves, self.path)


@dataclass(frozen=True)
class MapDrawing:
    """Maps of one variable and start, one per criterion; they share the view of the grid."""

    maps: xr.Dataset
    paths: tuple[Path, ...]
    ground: Ground
    members: int | None
    last_lead: float

    def draw(self) -> None:
        """Draw and write the maps."""
        from ensemble_horizon.products.maps import draw_horizon_map  # noqa: PLC0415
        from ensemble_horizon.products.view import map_view  # noqa: PLC0415

        one = self.maps.compute()
        view = map_view(one["horizon"].isel({START: 0, CRITERION: 0}))
        for column, path in enumerate(self.paths):
            draw_horizon_map(
                one,
                path,
                criterion=column,
                ground=self.ground,
                members=self.members,
                last_lead=self.last_lead,
                view=view,
            )


@dataclass(frozen=True)
class SharesDrawing:
    """Time to the limit of one variable, once or under several versions."""

    parts: tuple[xr.Dataset, ...]
    labels: tuple[str, ...]
    when: str
    path: Path

    def draw(self) -> None:
        """Draw and write the figure."""
        from ensemble_horizon.products.share_figures import Curves, draw_shares  # noqa: PLC0415

        draw_shares(Curves(self.parts, self.labels, self.when), self.path)


def draw_in_turn(drawings: Sequence[Drawing]) -> None:
    """Draw one after the other, in this process."""
    for drawing in drawings:
        drawing.draw()


def drawings_of(
    results: Sequence[VariableResult],
    folder: Path,
    ground: Ground,
    shares: Sequence[xr.Dataset] = (),
) -> Iterator[Drawing]:
    """Yield all figures: the maps of each variable and start first, as they take longest."""
    curves: list[Drawing] = []
    taken: set[str] = set()
    for result in results:
        variable = valid_name(str(result.curves.attrs.get("variable", "variable")), taken)
        curves += _curve_drawings(result.curves, variable, folder)
        if result.maps is not None:
            yield from _map_drawings(result.maps, result.curves, variable, folder, ground)
    yield from curves
    taken = set()
    for part in shares:
        name = valid_name(str(part.attrs["variable"]), taken)
        when = f"{int(part.attrs['start_count'])} starts"
        yield SharesDrawing((part,), ("",), when, folder / f"{name}_time_to_limit.png")


def _curve_drawings(curves: xr.Dataset, variable: str, folder: Path) -> Iterator[Drawing]:
    if curves.sizes[PLACE] and curves.sizes[CRITERION]:
        for position, stamp in enumerate(_stamps(curves)):
            one = curves.isel({START: [position]})
            yield CurveDrawing(one, folder / f"{variable}_curves_{stamp}.png")


def _map_drawings(
    maps: xr.Dataset,
    curves: xr.Dataset,
    variable: str,
    folder: Path,
    ground: Ground,
) -> Iterator[Drawing]:
    names: set[str] = set()
    criteria = [valid_name(str(label), names) for label in maps[CRITERION].values]
    members = int(curves["members"].max()) if "members" in curves else None
    drawn = [name for name in ("horizon", "low", "high", "status", "threshold") if name in maps]
    for position, stamp in enumerate(_stamps(maps)):
        yield MapDrawing(
            maps=maps[drawn].isel({START: [position]}),
            paths=tuple(folder / f"{variable}_map_{name}_{stamp}.png" for name in criteria),
            ground=ground,
            members=maps.attrs.get("members", members),
            last_lead=float(curves["lead"].values[-1]),
        )


def _stamps(data: xr.Dataset) -> list[str]:
    """Return the starts as parts of file names: ``20310105T00``, or the label where pooled."""
    labels = start_labels(data)
    starts: np.ndarray = data[START].values
    stamps = []
    for start, label in zip(starts, labels, strict=True):
        text = iso_start(start, label)
        short = text.replace("-", "").replace(":", "")
        while short.endswith("00") and "T" in short and len(short) > len("20310105T00"):
            short = short[:-2]
        stamps.append(valid_name(short).removeprefix("v_"))
    return stamps
