"""The products of verifying: tables, NetCDF and figures, moved in together."""

from __future__ import annotations

import os
from collections.abc import Callable, Iterator, Mapping, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
import xarray as xr

from ensemble_horizon.products.drawing import Drawing, draw_in_turn
from ensemble_horizon.products.folder import FIGURES, PROGRAM, Leaflet, write_folder
from ensemble_horizon.products.netcdf import valid_name
from ensemble_horizon.products.places import BARE, Ground
from ensemble_horizon.products.score_file import write_score_file, write_score_maps
from ensemble_horizon.products.score_table import (
    LIMIT_COLUMNS,
    score_columns,
    write_limit_table,
    write_score_table,
)
from ensemble_horizon.products.scores import ScoredVariable
from ensemble_horizon.vocabulary import CRITERION, LIMIT, SCORE, START, Status

README = "README_scores.txt"
_NOTES = {
    "scores.csv": "one row per variable, place, score and lead",
    "skill_limits.csv": "lead-time limits of skill: one row per variable, place and score",
    "scores.nc": "scores, ranks and skill limits of regions and sites (CF-1.11)",
    "score_maps.nc": "scores and skill limits per grid point (CF-1.11)",
}
_STATUS_WORDS = {
    Status.at_start: "not above the level at the first lead",
    Status.no_data: "too little known",
}


def write_scores(
    folder: str | os.PathLike[str],
    results: Sequence[ScoredVariable],
    provenance: Mapping[str, Any],
    *,
    notes: Sequence[str] = (),
    figures: bool = True,
    ground: Ground = BARE,
    draw: Callable[[Sequence[Drawing]], None] = draw_in_turn,
) -> list[Path]:
    """Write all products of verifying into ``folder``, all together or not at all.

    ``scores.csv``, ``skill_limits.csv``, ``scores.nc``, ``README_scores.txt``, and where there are
    maps ``score_maps.nc``; with ``figures`` in ``figures/`` scores by lead and ranks per variable,
    and a map per variable and limit. Products of `write_products` in the same folder stay.

    Parameters
    ----------
    folder : path
        Made if need be. Other files in it are left alone.
    results : sequence of objects with ``places`` and ``maps``
        One per variable, at least one.
    provenance : mapping
        See `netcdf.global_attributes`.
    notes : sequence of str
        What was left out.
    figures, ground, draw
        As in `write_products`.

    Raises
    ------
    ProductError
        If the folder cannot be written.
    """
    data = results[0].places
    texts = zip(data[SCORE].values, data["score_text"].values, strict=True)
    left_out = {str(number): note for number, note in enumerate(notes, start=1)}
    sections = {
        "Scores": {str(name): str(text) for name, text in texts},
        "Columns of scores.csv": score_columns(results),
        "Columns of skill_limits.csv": LIMIT_COLUMNS,
        **({"Not verified": left_out} if left_out else {}),
    }
    leaflet = Leaflet(f"Forecasts verified by {PROGRAM}", _NOTES, sections, README)

    def write(aside: Path) -> None:
        write_score_table(aside / "scores.csv", results)
        write_limit_table(aside / "skill_limits.csv", results)
        write_score_file(aside / "scores.nc", results, provenance)
        maps = [result.maps for result in results if result.maps is not None]
        if maps:
            write_score_maps(aside / "score_maps.nc", maps, provenance)
        if figures:
            draw(list(_drawings(results, aside / FIGURES, ground)))

    return write_folder(folder, leaflet, write)


@dataclass(frozen=True)
class _Alone:
    """One variable's places and nothing else, to be sent to another process."""

    places: xr.Dataset
    maps: None = None


@dataclass(frozen=True)
class ScoreDrawing:
    """Scores by lead, or ranks, of one variable."""

    result: _Alone
    path: Path
    ranks: bool

    def draw(self) -> None:
        """Draw and write the figure."""
        from ensemble_horizon.products import score_figures  # noqa: PLC0415

        (score_figures.draw_ranks if self.ranks else score_figures.draw_scores)(
            self.result, self.path
        )


@dataclass(frozen=True)
class SkillMapDrawing:
    """Maps of the skill limits of one variable."""

    maps: xr.Dataset
    paths: tuple[Path, ...]
    ground: Ground

    def draw(self) -> None:
        """Draw and write the maps."""
        from ensemble_horizon.products.maps import draw_horizon_map  # noqa: PLC0415
        from ensemble_horizon.products.view import map_view  # noqa: PLC0415

        view = map_view(self.maps["horizon"].isel({START: 0, CRITERION: 0}))
        for column, path in enumerate(self.paths):
            draw_horizon_map(self.maps, path, criterion=column, ground=self.ground, view=view)


def _drawings(results: Sequence[ScoredVariable], folder: Path, ground: Ground) -> Iterator[Drawing]:
    """Yield all figures, the maps first, as they take longest."""
    others: list[Drawing] = []
    taken: set[str] = set()
    for result in results:
        variable = valid_name(str(result.places.attrs["variable"]), taken)
        alone = _Alone(result.places)
        others.append(ScoreDrawing(alone, folder / f"{variable}_scores.png", False))
        others.append(ScoreDrawing(alone, folder / f"{variable}_ranks.png", True))
        if result.maps is not None and result.maps.sizes[LIMIT]:
            names = [str(name) for name in result.maps[LIMIT].values]
            paths = tuple(folder / f"{variable}_limit_{name}.png" for name in names)
            yield SkillMapDrawing(_as_horizons(result.maps), paths, ground)
    yield from others


def _as_horizons(maps: xr.Dataset) -> xr.Dataset:
    """Skill limits as the maps of horizons take them."""
    found = maps[["horizon", "horizon_low", "horizon_high", "status"]].rename(
        {"horizon_low": "low", "horizon_high": "high", LIMIT: CRITERION}
    )
    pairs = zip(maps["limit_text"].values, maps["level"].values, strict=True)
    labels = [f"{text} above {level:g}" for text, level in pairs]
    found = found.drop_vars(["limit_text", "level"]).assign_coords({CRITERION: labels})
    found = found.expand_dims({START: np.array(["NaT"], "datetime64[ns]")})
    found = found.assign_coords({"start_label": (START, [f"{maps.attrs['starts']} starts"])})
    return found.assign_attrs({**maps.attrs, "status_words": _STATUS_WORDS})
