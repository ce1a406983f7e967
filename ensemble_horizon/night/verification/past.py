"""Past starts and what is known of their valid times, by the names of the files where they tell."""

from __future__ import annotations

import logging
from collections.abc import Mapping, Sequence

import numpy as np

from ensemble_horizon.errors import InputError
from ensemble_horizon.night.input import Input, find_runs, usable_input
from ensemble_horizon.night.verification.sources import analysis_catalogue
from ensemble_horizon.runs import Catalogue
from ensemble_horizon.runs.files import Files, FoundFile, find_files
from ensemble_horizon.runs.observations import read_observations
from ensemble_horizon.runs.times import STANDARD
from ensemble_horizon.settings import Settings

# So many of the newest dates are asked in turn for analyses of all variables.
_NEWEST = 8

log = logging.getLogger(__name__)

Dated = Mapping[np.datetime64, Sequence[FoundFile]]


def by_date(files: Files) -> dict[np.datetime64, list[FoundFile]] | None:
    """Files by the date in their names, in order; None where one of them tells none.

    Raises
    ------
    InputError
        if there are no files.
    """
    found: dict[np.datetime64, list[FoundFile]] = {}
    for file in find_files(files):
        if file.parts.start is None:
            return None
        found.setdefault(np.datetime64(file.parts.start, "s"), []).append(file)
    return dict(sorted(found.items()))


class PastRuns:
    """Runs of starts before tonight; headers are read start by start where names tell them.

    Parameters
    ----------
    settings : Settings
        Whatever ``runs.starts`` says, all starts are known.
    tonight : datetime64
    """

    def __init__(self, settings: Settings, tonight: np.datetime64) -> None:
        runs = settings.runs.model_copy(update={"starts": "all"})
        self._settings = settings.model_copy(update={"runs": runs})
        self._whole: Catalogue | None = None
        self._dated: Dated = {}
        self.trouble = ""
        try:
            dated = by_date(settings.run_files())
            if dated is None:
                self._whole = find_runs(self._settings)
        except InputError as error:
            self.trouble = str(error)
            dated = {}
        if dated is None and self._whole is not None:
            self.starts = [start for start in _starts_of(self._whole) if start < tonight]
        else:
            self._dated = {} if dated is None else dated
            self.starts = [start for start in self._dated if start < tonight]

    def open(self, start: np.datetime64) -> Input:
        """What can be used of the runs of a start.

        Raises
        ------
        InputError
            if nothing can be.
        """
        whole = self._whole
        if whole is None:
            whole = find_runs(self._settings, files=self._dated[start])
        starts = _starts_of(whole)
        if start not in starts:
            raise InputError(
                self._dated[start][0].path,
                expected=f"the start that its name tells, {start}",
                found=", ".join(map(str, starts)) or f"dates of the calendar {whole.calendar}",
                remedy="correct the name or the file",
            )
        return usable_input(self._settings, whole.subset(starts=[starts.index(start)]))


def last_valid(runs: Catalogue) -> np.datetime64:
    """The last valid time of the only start of a catalogue."""
    there = np.zeros(runs.leads.size, dtype=bool)
    for name in runs.variables:
        there |= runs.present(name)[0].any(axis=1)
    return _date(int(runs.start_ticks[0] + runs.lead_ticks[there].max()))


class Truth:
    """Analyses or observations, and how far they reach.

    Parameters
    ----------
    settings : Settings
        All of whose variables are held against something.

    Attributes
    ----------
    newest : datetime64, the newest valid time that is known of every variable

    Raises
    ------
    InputError
        if there are no analyses, or no observations, that can be read.
    """

    def __init__(self, settings: Settings) -> None:
        self._settings = settings
        self._dated: Dated | None = None
        self._held: dict[str, Catalogue] = {}
        if settings.analyses is None:
            self.newest = min(self._newest_observation(name) for name in settings.variables)
            return
        self._dated = by_date(settings.files(settings.analyses.files))
        self.newest = self._newest_analysis()

    def held(self, first: np.datetime64, last: np.datetime64) -> dict[str, Catalogue]:
        """Headers of the analyses of each variable between two times."""
        if self._dated is None or not self._dated:
            return self._held
        dates = list(self._dated)
        low, high = np.searchsorted(np.array(dates), np.array([first, last]))
        # A file may begin or end at the date in its name: those next to the two times may count.
        chosen = dates[max(int(low) - 1, 0) : int(high) + 1]
        return self._catalogues([file for date in chosen for file in self._dated[date]])

    def _newest_analysis(self) -> np.datetime64:
        if self._dated is None:
            self._held = self._catalogues(None)
            return self._reach(self._held)
        problem: InputError | None = None
        for date in list(self._dated)[: -_NEWEST - 1 : -1]:
            try:
                return self._reach(self._catalogues(self._dated[date]))
            except InputError as error:
                problem = problem or error
        assert problem is not None
        raise problem

    def _catalogues(self, files: Files | None) -> dict[str, Catalogue]:
        found: dict[tuple[object, ...], Catalogue] = {}
        held = {}
        for name, table in self._settings.variables.items():
            assert self._settings.analyses is not None
            key = (self._settings.analyses.names.get(name), table.sources(name), table.level)
            if key not in found:
                found[key] = analysis_catalogue(self._settings, name, files)
            held[name] = found[key]
        return held

    def _reach(self, held: Mapping[str, Catalogue]) -> np.datetime64:
        return min(_date(int(catalogue.start_ticks.max())) for catalogue in held.values())

    def _newest_observation(self, name: str) -> np.datetime64:
        table = self._settings.observations[name]
        path = self._settings.path(table.file)
        found = read_observations(path, time=table.time, site=table.site, value=table.value)
        sites = {site.name for site in self._settings.places()[1]} & set(found.values)
        times = [max(found.values[site]) for site in sites]
        if not times:
            raise InputError(
                str(path),
                expected="observations at a site of the settings",
                found=f"observations at {', '.join(list(found.values)[:6])}",
                remedy="spell the sites as under [sites] in the settings, or add them there",
            )
        return _date(max(times))


def _starts_of(runs: Catalogue) -> list[np.datetime64]:
    """Starts of a catalogue; none where they are not dates of the standard calendar."""
    if runs.calendar not in STANDARD:
        return []
    return [_date(int(tick)) for tick in runs.start_ticks]


def _date(tick: int) -> np.datetime64:
    return np.datetime64(tick, "us").astype("datetime64[s]")
