"""The archive of nights: one file a night, and what is usual by the nights before."""

from __future__ import annotations

import os
from collections import Counter
from collections.abc import Iterable, Mapping
from dataclasses import dataclass
from datetime import datetime
from pathlib import Path
from typing import Any, NamedTuple

import numpy as np

from ensemble_horizon.errors import InputError, ProductError
from ensemble_horizon.horizon.usual import NightHorizon, Usual, usual_of
from ensemble_horizon.products.night_file import NewerNightError, night_from, write_night_file
from ensemble_horizon.products.nights import Night, NightLimit, start_of_name
from ensemble_horizon.products.sealed import moved_aside
from ensemble_horizon.settings.tables import NightTable

NIGHTS = "nights"
_PATIENCE = 2  # files looked at for every night wanted, where not all nights hold the same limits
Key = tuple[str, str, str]


@dataclass(frozen=True)
class UsualOptions:
    """What "usual" is measured by.

    Parameters
    ----------
    nights : int
        How many past nights.
    season_days : int
        The same time of year reaches so many days before and after the date.
    """

    nights: int = 30
    season_days: int = 45

    @classmethod
    def of(cls, table: NightTable) -> UsualOptions:
        """As the settings say."""
        return cls(table.usual_nights, table.season_days)


class NightUsual(NamedTuple):
    """What is usual, by (variable, place, criterion), and plain sentences on the archive."""

    usual: dict[Key, Usual]
    notes: tuple[str, ...]


class Filed(NamedTuple):
    """The file of a night, and plain sentences on what stood in its place."""

    path: Path
    notes: tuple[str, ...]


def file_night(archive: str | os.PathLike[str], night: Night, about: Mapping[str, Any]) -> Filed:
    """Put a night into the archive: ``nights/20310214T00.nc``.

    A night filed again replaces itself at one stroke. A broken file of that name is set aside.

    Parameters
    ----------
    archive : path
        Folder of the archive, made if need be.
    night : Night
        From `night_of`, which refuses starts that are not dates.
    about : mapping
        See `netcdf.global_attributes`.

    Raises
    ------
    ProductError
        If it cannot be written, or what stands there cannot be read and would be lost.
    """
    shelf = _Shelf(Path(archive) / NIGHTS)
    place = shelf.folder / night.name
    if os.path.lexists(place):
        shelf.read(place, night.start)
        if place in shelf.left:
            raise ProductError(
                str(place),
                expected="no file, or the file of that night",
                found=shelf.left[place],
                remedy="look at that file, give permission to it or move it away",
            )
    return Filed(write_night_file(place, night, about), tuple(shelf.notes))


def usual_of_night(
    archive: str | os.PathLike[str], tonight: Night, options: UsualOptions
) -> NightUsual:
    """What is usual for each limit of tonight, by the nights before it.

    Parameters
    ----------
    archive : path
        Folder of the archive; it need not exist.
    tonight : Night
        From `night_of`. Whether it has been filed makes no difference.
    options : UsualOptions

    Returns
    -------
    NightUsual
        With a `Usual` for every limit of tonight.

    Notes
    -----
    A limit is compared with past ones of the same variable, place, criterion and `Measure`. The
    past nights are the N of other years nearest in the time of year, within ``season_days``, where
    there are so many; otherwise the N latest. At most 2 N files are opened for either. What the
    ensemble was made of (model, members, lags) is not compared: a new system wants a new archive.

    Broken files are moved to ``nights/set_aside/``, files that cannot be read or that a newer
    program wrote are left where they are, and both are named in the notes. Files whose names are
    not those of nights are not touched.

    Examples
    --------
    >>> tonight = Night(np.datetime64("2031-02-14T00"), ())
    >>> usual_of_night("no_archive_yet", tonight, UsualOptions())
    NightUsual(usual={}, notes=())
    """
    shelf = _Shelf(Path(archive) / NIGHTS)
    before = [start for start in shelf.starts() if start < tonight.start]
    season = _same_season(before, tonight.start, options.season_days)
    wanted = {limit.key: limit for limit in tonight.limits}
    past = {}
    if len(season) >= options.nights:
        found = shelf.gather(season, wanted, options.nights)
        past = {key: rows for key, rows in found.items() if len(rows) >= options.nights}
    seasonal = set(past)
    rest = {key: limit for key, limit in wanted.items() if key not in seasonal}
    past |= shelf.gather(sorted(before, reverse=True), rest, options.nights) if rest else {}
    usual = {key: _usual(limit, past[key], season=key in seasonal) for key, limit in wanted.items()}
    return NightUsual(usual, (*shelf.notes, *shelf.not_compared(rest)))


class _Shelf:
    """The folder of nights while it is read: every file at most once.

    Attributes
    ----------
    notes : list of str
        What was set aside or left out.
    left : dict of path to reason
        Files that could not be read and were left where they are.
    """

    def __init__(self, folder: Path) -> None:
        self.folder = folder
        self.notes: list[str] = []
        self.left: dict[Path, str] = {}
        self._nights: dict[np.datetime64, dict[Key, NightLimit] | None] = {}
        self._others: Counter[Key] = Counter()
        self._names: dict[np.datetime64, str] = {}

    def starts(self) -> list[np.datetime64]:
        """Starts that the file names tell; nothing is opened."""
        try:
            names = sorted(path.name for path in self.folder.iterdir())
        except FileNotFoundError:
            return []
        except OSError as error:
            self.notes.append(
                f"The archive {self.folder} cannot be listed ({_words(error)}), so nothing is "
                "known of what is usual."
            )
            return []
        found = {start_of_name(name): name for name in names}
        self._names = {start: name for start, name in found.items() if start is not None}
        return list(self._names)

    def gather(
        self, order: Iterable[np.datetime64], wanted: Mapping[Key, NightLimit], nights: int
    ) -> dict[Key, list[NightLimit]]:
        """For each wanted limit the first ``nights`` comparable ones, in the given order."""
        found: dict[Key, list[NightLimit]] = {key: [] for key in wanted}
        self._others.clear()
        opened = 0
        for start in order:
            missing = [key for key, rows in found.items() if len(rows) < nights]
            if not missing or opened >= _PATIENCE * nights:
                break
            night = self._night(start)
            if night is None:
                continue
            opened += 1
            for key in missing:
                if key not in night:
                    continue
                if night[key].measure.equals(wanted[key].measure):
                    found[key].append(night[key])
                else:
                    self._others[key] += 1
        return found

    def not_compared(self, wanted: Mapping[Key, NightLimit]) -> list[str]:
        """A sentence for each variable and criterion that was measured otherwise before."""
        worst: dict[tuple[str, str], int] = {}
        for (variable, place, criterion), count in self._others.items():
            if (variable, place, criterion) in wanted:
                pair = (variable, criterion)
                worst[pair] = max(count, worst.get(pair, 0))
        return [
            f"{variable}, {criterion}: {count} past {'night is' if count == 1 else 'nights are'} "
            "not compared, because the criterion, its hold time or the units were others or are "
            "not known."
            for (variable, criterion), count in worst.items()
        ]

    def read(self, path: Path, start: np.datetime64) -> Night | None:
        """The night of a file; None, with a note, where it is broken or cannot be read."""
        try:
            with path.open("rb") as file:
                stamp = _stamp(os.fstat(file.fileno()))
                content = file.read()
        except OSError as error:
            # A file that is not there any more was taken away since the folder was listed.
            if path.is_symlink() or not isinstance(error, FileNotFoundError):
                self._leave(path, _words(error))
            return None
        try:
            night = night_from(content, str(path))
        except NewerNightError as error:
            self._leave(path, f"{error.found}, of a newer program")
            return None
        except InputError as error:
            self._set_aside(path, stamp, error.found)
            return None
        if night.start != start:
            self._set_aside(path, stamp, f"the night of {night.start} under another name")
            return None
        return night

    def _night(self, start: np.datetime64) -> dict[Key, NightLimit] | None:
        if start not in self._nights:
            night = self.read(self.folder / self._names[start], start)
            rows = None if night is None else {limit.key: limit for limit in night.limits}
            self._nights[start] = rows
        return self._nights[start]

    def _leave(self, path: Path, reason: str) -> None:
        self.left[path] = reason
        self.notes.append(f"{path} of the archive cannot be read ({reason}) and is left out.")

    def _set_aside(self, path: Path, stamp: tuple[int, ...], reason: str) -> None:
        try:
            # Another program may have filed that night anew since it was read.
            moved = moved_aside(path) if _stamp(path.lstat()) == stamp else None
        except OSError as error:
            self._leave(path, f"{reason}; it cannot be moved aside, {_words(error)}")
            return
        if moved is None:
            self._leave(path, f"{reason}; it was being replaced")
            return
        self.notes.append(f"{path} of the archive is broken ({reason}) and is now {moved}.")


def _same_season(
    starts: Iterable[np.datetime64], tonight: np.datetime64, days: int
) -> list[np.datetime64]:
    """Starts of other years near the date of tonight, the nearest first, and newer before older."""
    date: datetime = tonight.astype("datetime64[s]").item()
    found = []
    for start in starts:
        when: datetime = start.astype("datetime64[s]").item()
        offsets = {
            year: abs((when - _anniversary(date, year)).total_seconds()) / 86400
            for year in (when.year - 1, when.year, when.year + 1)
            if 1 <= year <= 9999
        }
        year = min(offsets, key=lambda key: offsets[key])
        if year != date.year and offsets[year] <= days:
            found.append((round(offsets[year]), -start.astype(int), start))
    return [start for _, _, start in sorted(found)]


def _anniversary(date: datetime, year: int) -> datetime:
    try:
        return date.replace(year=year)
    except ValueError:  # the 29th of February
        return date.replace(year=year, month=3, day=1)


def _usual(tonight: NightLimit, past: list[NightLimit], *, season: bool) -> Usual:
    return usual_of(
        np.array([limit.horizon for limit in past]),
        np.array([int(limit.status) for limit in past]),
        np.array([limit.last_lead for limit in past]),
        first_lead=tonight.measure.first_lead,
        tonight=NightHorizon(tonight.horizon, int(tonight.status), tonight.last_lead),
        season=season,
    )


def _stamp(status: os.stat_result) -> tuple[int, ...]:
    return status.st_ino, status.st_size, status.st_mtime_ns


def _words(error: OSError) -> str:
    return (error.strerror or type(error).__name__).lower()
