"""The folder of products: everything is written aside first and moved in together."""

from __future__ import annotations

import contextlib
import os
import secrets
import shutil
from collections.abc import Callable, Iterable, Iterator, Mapping, Sequence
from dataclasses import dataclass, replace
from pathlib import Path
from typing import Any

import xarray as xr

from ensemble_horizon.errors import ArgumentError, ProductError
from ensemble_horizon.products.curve_file import write_horizon_file
from ensemble_horizon.products.drawing import Drawing, draw_in_turn, drawings_of
from ensemble_horizon.products.limits import VariableResult
from ensemble_horizon.products.map_file import write_map_file
from ensemble_horizon.products.places import BARE, Ground
from ensemble_horizon.products.share_table import COLUMN_NOTES as SHARE_NOTES
from ensemble_horizon.products.share_table import write_share_table
from ensemble_horizon.products.tables import COLUMN_NOTES, write_horizon_table
from ensemble_horizon.products.writing import disk_errors, refuse_folder
from ensemble_horizon.vocabulary import CAUTION, STATUS_MEANING

FIGURES = "figures"
README = "README.txt"

PROGRAM = "Ensemble Horizon"
_LIST = "Files"  # the lines below it tell the next run which files are products


@dataclass(frozen=True)
class Leaflet:
    """What ``README.txt`` says of a folder of products.

    Attributes
    ----------
    title : str
        The first line, ending in the name of the program; later runs know by it whose folder it is.
    notes : mapping of str to str
        What each file beside the figures holds.
    sections : mapping of heading to names and notes
        Such as the columns of a table.
    readme : str
        Its name, one of its own where products of several kinds stand in one folder.
    """

    title: str
    notes: Mapping[str, str]
    sections: Mapping[str, Mapping[str, str]]
    readme: str = README


_ESTIMATE = Leaflet(
    f"Products of {PROGRAM}",
    {
        "horizons.csv": "one row per start, variable, place and criterion",
        "horizons.nc": "curves, fits and limits of regions and sites (CF-1.11)",
        "horizon_maps.nc": "limits and fits per grid point (CF-1.11)",
        "time_to_limit.csv": "when how many of the starts have met their limit",
    },
    {
        "Columns of horizons.csv": COLUMN_NOTES,
        "Statuses": {status.name: meaning for status, meaning in STATUS_MEANING.items()},
    },
)


def write_products(
    folder: str | os.PathLike[str],
    results: Iterable[VariableResult],
    provenance: Mapping[str, Any],
    *,
    figures: bool = True,
    ground: Ground = BARE,
    shares: Sequence[xr.Dataset] = (),
    draw: Callable[[Sequence[Drawing]], None] = draw_in_turn,
) -> list[Path]:
    """Write all products of an estimate into ``folder``.

    ``horizons.csv``, ``horizons.nc``, ``README.txt``, and where there are maps ``horizon_maps.nc``;
    with ``figures`` a map per variable, criterion and start and the growth curves per variable and
    start in ``figures/``. The files are written to a hidden folder inside ``folder`` and moved into
    place together at the end; products of an earlier estimate that have no successor go at the same
    time. If anything fails, what stood there before is put back.

    Parameters
    ----------
    folder : path
        Made if need be. Other files in it are left alone.
    results : iterable of objects with ``curves`` and ``maps``
        One per variable, in the order of the settings; ``maps`` may be None.
    provenance : mapping
        See `netcdf.global_attributes`.
    figures : bool
        Whether to draw.
    ground : Ground
        Regions and sites to show on the maps.
    shares : sequence of Dataset
        Time to the limit of each variable, where there are several starts: ``time_to_limit.csv``
        and a figure per variable.
    draw : callable
        Draws all the figures it is given; in this process by default.

    Returns
    -------
    list of pathlib.Path
        The files, in the order written.

    Raises
    ------
    ArgumentError
        If there is no result.
    ProductError
        If the folder cannot be written.
    """
    found = list(results)
    if not found:
        raise ArgumentError(
            "results",
            expected="at least one variable",
            found="none",
            remedy="name a variable in the settings",
        )

    def write(aside: Path) -> None:
        write_horizon_table(aside / "horizons.csv", found)
        write_horizon_file(aside / "horizons.nc", found, provenance)
        maps = [result.maps for result in found if result.maps is not None]
        if maps:
            write_map_file(aside / "horizon_maps.nc", maps, provenance)
        if shares:
            write_share_table(aside / "time_to_limit.csv", shares)
        if figures:
            draw(list(drawings_of(found, aside / FIGURES, ground, shares)))

    sections = dict(_ESTIMATE.sections)
    if shares:
        sections["Columns of time_to_limit.csv"] = SHARE_NOTES
    return write_folder(folder, replace(_ESTIMATE, sections=sections), write)


def write_folder(
    folder: str | os.PathLike[str], leaflet: Leaflet, write: Callable[[Path], None]
) -> list[Path]:
    """Let ``write`` fill a hidden folder, add ``README.txt``, and move all of it in together.

    Products of an earlier run of the same kind that have no successor go at the same time.

    Returns
    -------
    list of pathlib.Path
        The files, in the order written.

    Raises
    ------
    ProductError
        If the folder cannot be written, or holds products of another kind.
    """
    with moved_together(folder, earlier_products(Path(folder), leaflet)) as aside:
        write(aside)
        names = [path.relative_to(aside) for path in written_files(aside)]
        with disk_errors(aside / leaflet.readme):
            (aside / leaflet.readme).write_text(_readme(names, leaflet), encoding="utf-8")
        names.append(Path(leaflet.readme))
    return [Path(folder) / name for name in names]


@contextlib.contextmanager
def moved_together(folder: str | os.PathLike[str], outdated: Sequence[Path] = ()) -> Iterator[Path]:
    """Give a hidden folder inside ``folder``; move its files out if the block succeeds.

    Files of the same names are replaced, and those of ``outdated`` (below ``folder``) that have no
    successor are removed. If a move fails, the moves before it are undone, and the files that stood
    there before are put back.

    Raises
    ------
    ProductError
        If ``folder`` cannot be made or written.
    """
    target = Path(folder)
    made = [parent for parent in (target, *target.parents) if not parent.exists()]
    aside = target / f".{secrets.token_hex(4)}.part"
    done = False
    try:
        with disk_errors(target):
            aside.mkdir(parents=True)
        yield aside
        with disk_errors(target):
            _move_in(aside, target, outdated)
        done = True
    except ProductError as error:
        # The hidden folder is nothing that the reader knows of.
        culprit, found = (
            text.replace(str(aside), str(target)) for text in (error.culprit, error.found)
        )
        raise ProductError(
            culprit, expected=error.expected, found=found, remedy=error.remedy
        ) from error.__cause__
    finally:
        shutil.rmtree(aside, ignore_errors=True)
        if not done:
            for parent in made:
                # Only what was made here, and only if nobody has put anything there since.
                with contextlib.suppress(OSError):
                    parent.rmdir()


def written_files(folder: Path) -> list[Path]:
    """Return the files below ``folder``, tables and data before figures."""
    files = [path for path in folder.rglob("*") if path.is_file()]
    return sorted(files, key=lambda path: (len(path.relative_to(folder).parts), path.name))


def earlier_products(folder: Path, leaflet: Leaflet) -> list[Path]:
    """Products that the ``README.txt`` of an earlier run lists: all that is ours to remove.

    Names relative to ``folder``; none where the file is missing or not one of ours.

    Raises
    ------
    ProductError
        If they are products of another kind, whose description would be lost.
    """
    try:
        lines = (folder / leaflet.readme).read_text(encoding="utf-8").splitlines()
    except (OSError, UnicodeDecodeError):
        return []
    title = lines[0] if lines else ""
    if title != leaflet.title and title.endswith(PROGRAM):
        raise ProductError(
            str(folder),
            expected=f"a folder of its own for: {leaflet.title}",
            found=f"a folder of: {title}",
            remedy="name another folder",
        )
    if title != leaflet.title or _LIST not in lines:
        return []
    names = []
    for line in lines[lines.index(_LIST) + 1 :]:
        if not line.startswith("  "):
            break
        name = Path(line.strip().partition(": ")[0])
        figure = name.parent == Path(FIGURES) and name.suffix == ".png"
        if figure or name.as_posix() in leaflet.notes:
            names.append(name)
    return names


def holds_estimate(folder: str | os.PathLike[str]) -> bool:
    """Whether products of an estimate stand in a folder itself."""
    try:
        with (Path(folder) / README).open(encoding="utf-8") as file:
            return file.readline().rstrip("\n") == _ESTIMATE.title
    except (OSError, UnicodeDecodeError):
        return False


def _move_in(aside: Path, target: Path, outdated: Sequence[Path]) -> None:
    files = [path.relative_to(aside) for path in written_files(aside)]
    before = aside / ".before"
    moved: list[Path] = []
    made: list[Path] = []
    try:
        for name in files:
            place = target / name
            refuse_folder(place)
            if not place.parent.exists():
                place.parent.mkdir(parents=True)
                made.append(place.parent)
            if place.exists():
                (before / name).parent.mkdir(parents=True, exist_ok=True)
                # A second link keeps the old file while the new one takes its name at one stroke.
                _keep(place, before / name)
            moved.append(name)
            (aside / name).replace(place)
        for name in outdated:
            place = target / name
            if name not in files and place.is_file():
                (before / name).parent.mkdir(parents=True, exist_ok=True)
                _keep(place, before / name)
                moved.append(name)
                place.unlink()
    except BaseException:
        for name in reversed(moved):
            with contextlib.suppress(OSError):
                if (before / name).exists():
                    (before / name).replace(target / name)
                elif not (aside / name).exists():
                    (target / name).unlink()
        for place in made:
            with contextlib.suppress(OSError):
                place.rmdir()
        raise
    for folder in {(target / name).parent for name in outdated} - {target}:
        with contextlib.suppress(OSError):
            folder.rmdir()  # where nothing is left in it


def _keep(old: Path, copy: Path) -> None:
    try:
        copy.hardlink_to(old)
    except OSError:
        shutil.copy2(old, copy)


def _readme(names: Sequence[Path], leaflet: Leaflet) -> str:
    lines = [leaflet.title, "", CAUTION, "", _LIST]
    for name in names:
        note = leaflet.notes.get(name.as_posix())
        lines.append(f"  {name.as_posix()}" + (f": {note}" if note else ""))
    for heading, entries in leaflet.sections.items():
        lines += ["", heading, *(f"  {name}: {note}" for name, note in entries.items())]
    return "\n".join(lines) + "\n"
