"""The briefing of one start: a page and a sheet of paper, from products that stand there."""

from __future__ import annotations

import os
import re
from collections.abc import Mapping, Sequence
from dataclasses import replace
from datetime import datetime
from importlib.metadata import version
from pathlib import Path

import numpy as np
import xarray as xr

from ensemble_horizon.errors import InputError
from ensemble_horizon.horizon.usual import Usual
from ensemble_horizon.night.archive import NightUsual, UsualOptions, usual_of_night
from ensemble_horizon.night.chain.owner import require_own
from ensemble_horizon.night.provenance import (
    calibration_words,
    provenance_of,
    require_same_settings,
    time_of_making,
)
from ensemble_horizon.night.results import VariableResult
from ensemble_horizon.night.writing import map_ground
from ensemble_horizon.products.folder import moved_together
from ensemble_horizon.products.limits import VariableResult as AnyResult
from ensemble_horizon.products.limits import start_labels
from ensemble_horizon.products.nights import night_of
from ensemble_horizon.products.page import Briefing, VersionsTable, read_versions, write_page
from ensemble_horizon.products.score_sentences import PastSkill
from ensemble_horizon.products.stored import read_results
from ensemble_horizon.products.wording import is_pooled, iso_start
from ensemble_horizon.settings import Settings
from ensemble_horizon.spread.places import grid_points, nearest_point
from ensemble_horizon.vocabulary import LATITUDE, LONGITUDE, START

PAGE, SHEET = "briefing.html", "briefing.pdf"
_NOT_SURVEYED = (
    "The files of the runs were not looked at for this briefing: of the input it knows only how "
    "many members were used."
)

_NOT_VERIFIED = (
    "No past start is verified for this briefing: `brief` shows what `estimate` made, and it is "
    "`nightly` and `verify` that hold past starts against what came true."
)
_FAR_KM = 25  # from here on a reader is told how far off the grid point of a site lies
_OPEN_SIGNS = re.compile(r"[{*?\[]")


def brief_and_write(
    settings: Settings, versions: str | os.PathLike[str] | None = None
) -> tuple[Briefing, list[Path]]:
    """Brief on the latest start of the products of ``estimate``, into their folder.

    ``briefing.html`` and ``briefing.pdf`` come into the folder together. Their time of making is
    that of the products, so that a second run makes the same files.

    Parameters
    ----------
    settings : Settings
        As the estimate was made by; what is usual comes from the archive of ``[night]``, if any.
    versions : path, optional
        Folder of a comparison; otherwise the one that ``[night]`` names, if any.

    Raises
    ------
    InputError
        If the products are missing, broken, of another kind or of other settings, or the folder of
        versions is not one.
    SettingsError
        If the archive is that of other runs.
    ProductError
        If the files cannot be written.
    """
    folder = settings.path(settings.products.folder)
    about = provenance_of(folder)
    require_same_settings(folder, about, settings)
    results = latest_start(read_results(folder))
    usual = usual_by_archive(settings, results)
    briefing = assemble_briefing(
        settings,
        results,
        made=time_of_making(folder, about),
        usual=usual.usual,
        troubles=_members_left_out(settings, results),
        notes=(*calibration_words(about), _NOT_SURVEYED, *usual.notes),
        versions=_versions(settings, versions),
        no_skill=_NOT_VERIFIED,
        surveyed=False,
    )
    return briefing, write_briefing(folder, briefing)


def assemble_briefing(
    settings: Settings,
    results: Sequence[AnyResult],
    *,
    made: datetime,
    usual: Mapping[tuple[str, str, str], Usual],
    troubles: Sequence[str],
    skill: Sequence[PastSkill] = (),
    no_skill: str = "",
    notes: Sequence[str] = (),
    versions: VersionsTable | None = None,
    surveyed: bool = True,
) -> Briefing:
    """Gather what page and sheet tell of the latest start of ``results``.

    Parameters
    ----------
    settings : Settings
        Title, members expected, regions, sites and coasts come from it.
    results : sequence of objects with ``curves`` and ``maps``
        One per variable, in the order of the settings.
    made : datetime
        Time of making, UTC.
    usual : mapping
        What is usual of each (variable, place, criterion).
    troubles, notes : sequence of str
        Plain sentences: what was wrong with the input, what else to know.
    skill : sequence of PastSkill
        Past skill by variable and place.
    no_skill : str
        Why there is none, in a sentence.
    versions : VersionsTable, optional
        How two versions compare.
    surveyed : bool
        Whether the files of the runs were looked at.

    Raises
    ------
    InputError
        If the results hold no start.
    """
    one = latest_start(results)
    curves = one[0].curves
    return Briefing(
        title=settings.title,
        start=iso_start(curves[START].values[0], start_labels(curves)[0]),
        made=made,
        results=one,
        members=_members_words(settings, one),
        usual=dict(usual),
        troubles=tuple(troubles),
        surveyed=surveyed,
        ground=map_ground(settings),
        versions=versions and replace(versions, tonight=_version_of(settings, versions)),
        skill=_named(skill, one),
        no_skill=no_skill,
        notes=(*notes, *_far_sites(settings, one)),
        version=version("ensemble-horizon"),
    )


def write_briefing(folder: str | os.PathLike[str], briefing: Briefing) -> list[Path]:
    """Write page and sheet into ``folder``, both or neither.

    Raises
    ------
    ArgumentError
        If the grid of a map cannot be drawn.
    ProductError
        If they cannot be written; what stood there before is left or put back.
    """
    # The plotting library is slow to load: only when there is something to draw.
    from ensemble_horizon.products.sheet_pdf import write_sheet  # noqa: PLC0415

    with moved_together(folder) as aside:
        write_page(aside / PAGE, briefing)
        write_sheet(aside / SHEET, briefing)
    return [Path(folder) / PAGE, Path(folder) / SHEET]


def latest_start(results: Sequence[AnyResult]) -> tuple[VariableResult, ...]:
    """Return the results of the latest start alone, without what stands for all starts.

    Raises
    ------
    InputError
        If there is no single start.
    """
    singles = [_single_starts(item.curves) for item in results]
    if not any(singles):
        raise InputError(
            "products",
            expected="limits of at least one start",
            found="none",
            remedy="run `estimate` again and look at what it says",
        )
    last = list(next(found for found in singles if found).values())[-1]
    return tuple(
        VariableResult(_only(item.curves, last), _maps(item.maps, last))
        for item, found in zip(results, singles, strict=True)
        if last in found.values()
    )


def usual_by_archive(settings: Settings, results: Sequence[AnyResult]) -> NightUsual:
    """Return what is usual by the archive that ``[night]`` names; nothing where it names none.

    Raises
    ------
    InputError
        If the starts are not dates of the standard calendar.
    SettingsError
        If the archive is that of other runs.
    """
    if settings.night is None:
        return NightUsual({}, ())
    archive = settings.path(settings.night.archive)
    require_own(settings, archive, products=False)
    return usual_of_night(archive, night_of(results), UsualOptions.of(settings.night))


def _single_starts(data: xr.Dataset) -> dict[int, str]:
    """Labels of the single starts by position."""
    pairs = zip(data[START].values, start_labels(data), strict=True)
    return {
        position: iso_start(start, label)
        for position, (start, label) in enumerate(pairs)
        if not is_pooled(start, label)
    }


def _only(data: xr.Dataset, label: str) -> xr.Dataset:
    here = [position for position, other in _single_starts(data).items() if other == label]
    return data.isel({START: here})


def _maps(maps: xr.Dataset | None, label: str) -> xr.Dataset | None:
    """Maps of the start; None where only those of all starts together were made."""
    found = None if maps is None else _only(maps, label)
    return found if found is not None and found.sizes[START] else None


def _members_used(results: Sequence[AnyResult]) -> tuple[int, int] | None:
    """Return the least and the most members that a limit rests on."""
    counts = [item.curves["members"].values.ravel() for item in results if "members" in item.curves]
    known = np.concatenate(counts) if counts else np.array([])
    return (int(known.min()), int(known.max())) if known.size else None


def _members_expected(settings: Settings) -> int | None:
    named = settings.runs.members
    return len(named) if isinstance(named, tuple) else named


def _members_words(settings: Settings, results: Sequence[AnyResult]) -> str:
    """Say how many members count: ``19 of 20 members``."""
    used, expected = _members_used(results), _members_expected(settings)
    if used is None:
        return ""
    count = str(used[0]) if used[0] == used[1] else f"{used[0]} to {used[1]}"
    return f"{count} members" if expected is None else f"{count} of {expected} members"


def _members_left_out(settings: Settings, results: Sequence[AnyResult]) -> list[str]:
    """What the products themselves tell of faults in the input."""
    used, expected = _members_used(results), _members_expected(settings)
    if used is None or expected is None or used[0] >= expected:
        return []
    words = _members_words(settings, results)
    return [f"Only {words} are used; the survey of the runs names the others and what they lack."]


def _named(skill: Sequence[PastSkill], results: Sequence[AnyResult]) -> tuple[PastSkill, ...]:
    """Past skill under the names that the variables have tonight."""
    names = {
        str(item.curves.attrs.get("variable", "")): str(item.curves.attrs.get("long_name", ""))
        for item in results
    }
    return tuple(
        replace(item, long_name=names.get(item.variable) or item.long_name) for item in skill
    )


def _far_sites(settings: Settings, results: Sequence[AnyResult]) -> list[str]:
    """Tell of each site whose grid point lies far away; nothing where no grid is at hand."""
    maps = next((item.maps for item in results if item.maps is not None), None)
    if maps is None or not {LATITUDE, LONGITUDE} <= set(maps.coords):
        return []
    latitude, longitude = grid_points({name: maps[name] for name in (LATITUDE, LONGITUDE)})
    found = []
    for site in settings.places()[1]:
        _, distance = nearest_point(site, latitude, longitude)
        if distance >= _FAR_KM:
            found.append(f"The grid point used for {site.name} lies {distance:.0f} km away.")
    return found


def _version_of(settings: Settings, versions: VersionsTable) -> str:
    """Return the version whose runs lie where tonight's do; empty where that is not certain."""
    named = settings.run_files()
    patterns = [named] if isinstance(named, str) else named
    folders = [_OPEN_SIGNS.split(path)[0].rpartition("/")[0] for path in patterns]
    here = [
        any(folder and file.startswith(f"{folder}/") for folder in folders)
        for file in versions.inputs
    ]
    if here == [True, False]:
        return versions.version_a
    return versions.version_b if here == [False, True] else ""


def _versions(settings: Settings, folder: str | os.PathLike[str] | None) -> VersionsTable | None:
    if folder is not None:
        return read_versions(folder)
    if settings.night is not None and settings.night.versions is not None:
        return read_versions(settings.path(settings.night.versions))
    return None
