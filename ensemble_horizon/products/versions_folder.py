"""The folder of a comparison: table, NetCDF and figures, moved in together."""

from __future__ import annotations

import os
from collections.abc import Callable, Iterable, Iterator, Mapping, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import xarray as xr

from ensemble_horizon.products.difference_table import (
    DIFFERENCE_COLUMNS,
    write_difference_table,
)
from ensemble_horizon.products.drawing import Drawing, SharesDrawing, draw_in_turn
from ensemble_horizon.products.folder import FIGURES, PROGRAM, Leaflet, write_folder
from ensemble_horizon.products.gains import VersionsResult, starts_words
from ensemble_horizon.products.gains_file import write_gains_file
from ensemble_horizon.products.gains_table import COLUMN_NOTES, write_gains_table
from ensemble_horizon.products.netcdf import valid_name
from ensemble_horizon.products.places import BARE, Ground
from ensemble_horizon.vocabulary import CRITERION

_NOTES = {
    "versions.csv": "hours gained: one row per variable, place and criterion",
    "score_differences.csv": "differences of scores by lead, where both versions were verified",
    "versions.nc": "all of these, and hours gained at every grid point (CF-1.11)",
}


def write_versions(
    folder: str | os.PathLike[str],
    results: Sequence[VersionsResult],
    provenance: Mapping[str, Any],
    *,
    scores: Sequence[xr.Dataset] = (),
    notes: Mapping[str, Sequence[str]],
    figures: bool = True,
    ground: Ground = BARE,
    draw: Callable[[Sequence[Drawing]], None] = draw_in_turn,
) -> list[Path]:
    """Write all products of a comparison into ``folder``, all together or not at all.

    ``versions.csv``, ``versions.nc``, ``README.txt``, and with ``figures`` in ``figures/`` the
    hours gained with their intervals, the time to the limit under both versions per variable,
    where there are maps one per variable and criterion, and where there are scores their
    differences by lead.

    Parameters
    ----------
    folder : path
        Made if need be. Other files in it are left alone.
    results : sequence of VersionsResult
        One per variable, at least one.
    provenance : mapping
        See `netcdf.global_attributes`.
    scores : sequence of Dataset
        Differences of scores (score, lead, place) per variable: ``score_differences.csv``.
        Variables without any are not among them.
    notes : mapping of heading to lines
        What is not compared, and cautions.
    figures, ground, draw
        As in `write_products`.

    Returns
    -------
    list of pathlib.Path
        The files, in the order written.

    Raises
    ------
    ProductError
        If the folder cannot be written, or holds products of another kind.
    """
    about = results[0].places.attrs
    leaflet = Leaflet(
        f"Two versions compared by {PROGRAM}",
        _NOTES,
        {
            "Versions": {"a": about["version_a"], "b": about["version_b"]},
            **{
                heading: {str(number): line for number, line in enumerate(lines, start=1)}
                for heading, lines in notes.items()
                if lines
            },
            "Columns of versions.csv": COLUMN_NOTES,
            **({"Columns of score_differences.csv": DIFFERENCE_COLUMNS} if scores else {}),
        },
    )

    def write(aside: Path) -> None:
        write_gains_table(aside / "versions.csv", [item.places for item in results])
        if scores:
            write_difference_table(aside / "score_differences.csv", scores)
        write_gains_file(aside / "versions.nc", results, provenance, notes, scores)
        if figures:
            draw(list(_drawings(results, scores, aside / FIGURES, ground)))

    return write_folder(folder, leaflet, write)


@dataclass(frozen=True)
class GainsDrawing:
    """Hours gained of all variables."""

    tables: Sequence[xr.Dataset]
    path: Path

    def draw(self) -> None:
        """Draw and write the figure."""
        from ensemble_horizon.products.gains_figure import draw_gains  # noqa: PLC0415

        draw_gains(self.tables, self.path)


@dataclass(frozen=True)
class GainMapDrawing:
    """Maps of hours gained of one variable, one per criterion."""

    maps: xr.Dataset
    paths: tuple[Path, ...]
    ground: Ground

    def draw(self) -> None:
        """Draw and write the maps."""
        from ensemble_horizon.products.gain_maps import draw_gain_map  # noqa: PLC0415
        from ensemble_horizon.products.view import map_view  # noqa: PLC0415

        view = map_view(self.maps["gained"].isel({CRITERION: 0}))
        for number, path in enumerate(self.paths):
            draw_gain_map(self.maps, path, criterion=number, ground=self.ground, view=view)


@dataclass(frozen=True)
class DifferencesDrawing:
    """Differences of scores of one variable."""

    part: xr.Dataset
    path: Path

    def draw(self) -> None:
        """Draw and write the figure."""
        from ensemble_horizon.products.difference_figure import draw_differences  # noqa: PLC0415

        draw_differences(self.part, self.path)


def _drawings(
    results: Sequence[VersionsResult], scores: Sequence[xr.Dataset], folder: Path, ground: Ground
) -> Iterator[Drawing]:
    """Yield all figures, the maps first, as they take longest."""
    scored = {str(part.attrs["variable"]): part for part in scores}
    others: list[Drawing] = [
        GainsDrawing([item.places for item in results], folder / "hours_gained.png")
    ]
    taken = {"hours_gained"}
    for result in results:
        about = result.places.attrs
        variable = valid_name(str(about["variable"]), taken)
        if about["variable"] in scored:
            part = scored[about["variable"]]
            others.append(DifferencesDrawing(part, folder / f"{variable}_score_differences.png"))
        labels = (about["version_a"], about["version_b"])
        path = folder / f"{variable}_time_to_limit.png"
        others.append(SharesDrawing(result.shares, labels, starts_words(result.places), path))
        if result.maps is not None:
            yield GainMapDrawing(
                result.maps, tuple(_map_paths(result.maps, folder, variable)), ground
            )
    yield from others


def _map_paths(maps: xr.Dataset, folder: Path, variable: str) -> Iterable[Path]:
    names: set[str] = set()
    for label in maps[CRITERION].values:
        yield folder / f"{variable}_gained_{valid_name(str(label), names)}.png"
