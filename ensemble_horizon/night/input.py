"""The input of a night: headers read, starts chosen, faulty members left out."""

from __future__ import annotations

import logging
import re
from collections.abc import Callable, Sequence
from dataclasses import dataclass, replace

import numpy as np

from ensemble_horizon.errors import InputError, SettingsError
from ensemble_horizon.night.engine import headers_mapper
from ensemble_horizon.night.variables import (
    LATITUDES,
    levels_of,
    position_geometry,
    source_names,
)
from ensemble_horizon.runs import Catalogue, Fault, SurveyReport, read_catalogue, survey_runs
from ensemble_horizon.runs.files import FoundFile
from ensemble_horizon.runs.units import converter
from ensemble_horizon.runs.verdict import fault_lines
from ensemble_horizon.settings import Settings
from ensemble_horizon.spread.displacements import SPHERE

_DATE = re.compile(r"\d{4}-\d\d(-\d\d([T ]\d\d(:?\d\d)*)?)?Z?")

log = logging.getLogger(__name__)


@dataclass(frozen=True)
class Input:
    """Files that can be used, and what was wrong with the rest."""

    catalogue: Catalogue
    report: SurveyReport

    @property
    def faults(self) -> tuple[Fault, ...]:
        """What the headers brought to light."""
        return self.report.faults

    def at(self, starts: Sequence[str]) -> Input:
        """The same at some of its starts only, given by label."""
        labels = [self.catalogue.start_label(n) for n in range(self.catalogue.starts.size)]
        chosen = [number for number, label in enumerate(labels) if label in set(starts)]
        return replace(self, catalogue=self.catalogue.subset(starts=chosen))


def open_input(
    settings: Settings,
    progress: Callable[[int, int], None] | None = None,
    files: Sequence[FoundFile] | None = None,
) -> Input:
    """Read headers and leave out what the settings do not want used.

    Parameters
    ----------
    files : sequence of FoundFile, optional
        Those to look at, of all that the settings name.

    Raises
    ------
    InputError
        if the survey of the headers says that the runs are not usable.
    """
    return usable_input(settings, choose_starts(settings, find_runs(settings, progress, files)))


def usable_input(settings: Settings, catalogue: Catalogue) -> Input:
    """Leave out what the settings do not want used, of headers that have been read.

    Raises
    ------
    InputError
        if the survey of the headers says that the runs are not usable.
    """
    report = survey(settings, catalogue, content=False)
    if not report.usable:
        raise _not_usable(settings, report)
    _warn(settings, report)
    kept = catalogue.without(report.drop, report.drop_at)
    short = set(report.short_starts)
    if short:
        labels = [kept.start_label(number) for number in range(kept.starts.size)]
        kept = kept.subset(starts=[n for n, label in enumerate(labels) if label not in short])
    return Input(kept, report)


def _not_usable(settings: Settings, report: SurveyReport) -> InputError:
    expected = "runs without faults, as runs.incomplete = 'stop' asks"
    remedy = "run the survey command to see every fault"
    if len(report.short_starts) == len(report.starts):
        least = settings.runs.minimum_members
        expected = f"usable runs of at least {least} members (runs.minimum_members)"
        remedy += ", or lower runs.minimum_members"
    return InputError(
        f"runs {settings.runs.files!r}",
        expected=expected,
        found="; ".join(report.reasons) or report.summary(),
        remedy=remedy,
    )


def _warn(settings: Settings, report: SurveyReport) -> None:
    """Log what the headers lack, and what follows from it."""
    if not report.faults:
        return
    usable = report.summary() if report.reasons else "usable as is, gaps and all"
    log.warning("runs: %s", usable)
    for line in fault_lines(report.faults):
        log.warning("runs: %s", line)
    if report.missing:
        here = len(report.members)
        log.warning(
            "runs: %d members are there, where %d were expected", here, here + len(report.missing)
        )
    if report.short_starts:
        log.warning(
            "runs: fewer than %d usable members (runs.minimum_members) at %s, left out",
            settings.runs.minimum_members, ", ".join(report.short_starts),
        )  # fmt: skip


def find_runs(
    settings: Settings,
    progress: Callable[[int, int], None] | None = None,
    files: Sequence[FoundFile] | None = None,
) -> Catalogue:
    """The catalogue of all files that the settings name, or of some that were found before."""
    try:
        catalogue = read_catalogue(
            settings.run_files() if files is None else files,
            variables=source_names(settings),
            level=levels_of(settings) or None,
            lagged=settings.runs.lagged,
            progress=progress,
            mapper=headers_mapper(settings.engine.workers),
        )
    except InputError as error:
        raise _with_keys(settings, error) from error
    control = settings.runs.control
    if control is not None and control not in catalogue.members:
        there = ", ".join(map(str, catalogue.members))
        log.warning("runs: the control (runs.control = %r) is not there, only %s", control, there)
    return catalogue


def _with_keys(settings: Settings, error: InputError) -> InputError:
    """The error, with the keys of the settings that name an absent variable."""
    if not error.expected.startswith("the variable "):
        return error
    keys = []
    for name, table in settings.variables.items():
        if any(repr(source) in error.expected for source in table.sources(name)):
            keys.append(f"variables.{name}.{table.source_key}")
    if not keys:
        return error
    return InputError(
        error.culprit,
        expected=error.expected,
        found=error.found,
        remedy=f"{error.remedy}; the key is {' or '.join(keys)}",
    )


def survey(
    settings: Settings,
    catalogue: Catalogue,
    *,
    content: bool,
    progress: Callable[[int, int], None] | None = None,
) -> SurveyReport:
    """Survey a catalogue by the settings."""
    runs = settings.runs
    return survey_runs(
        catalogue,
        expected_members=runs.members,
        plausible=_plausible(settings, catalogue),
        minimum_members=runs.minimum_members,
        incomplete=runs.incomplete,
        content=content,
        progress=progress,
    )


def choose_starts(settings: Settings, catalogue: Catalogue) -> Catalogue:
    """The starts that the settings ask for."""
    wanted = settings.runs.starts
    if wanted == "all":
        return catalogue
    if wanted == "latest":
        return catalogue.subset(starts=[catalogue.starts.size - 1])
    labels = [catalogue.start_label(number) for number in range(catalogue.starts.size)]
    chosen = []
    for text in wanted:
        found = [number for number, label in enumerate(labels) if label.startswith(text)]
        if not found:
            raise SettingsError(
                "runs.starts",
                expected=f"starts that are there: {', '.join(labels[:6])}"
                + (" and more" if len(labels) > 6 else ""),
                found=repr(text),
                remedy='take one of those, or "latest" or "all"'
                if _DATE.fullmatch(text)
                else "write starts as ISO 8601, for instance 2031-02-14T00",
            )
        chosen += found
    return catalogue.subset(starts=np.unique(chosen))


def _plausible(settings: Settings, catalogue: Catalogue) -> dict[str, tuple[float, float]]:
    """Plausible ranges by source name; magnitudes of vectors bound both components.

    Of positions on the sphere, the latitudes are known to lie between the poles.
    """
    ranges: dict[str, tuple[float, float]] = {}
    for name, table in settings.variables.items():
        geometry = position_geometry(settings, catalogue, name)
        if geometry is not None and geometry.kind == SPHERE:
            ranges[table.sources(name)[0]] = LATITUDES
        if table.plausible is None:
            continue
        for part in table.sources(name):
            units = catalogue.variables[part].units or ""
            factor, offset = (1.0, 0.0)
            if table.units is not None:
                factor, offset = converter(units, table.units, f"variables.{name}.units")
            low, high = sorted((value - offset) / factor for value in table.plausible)
            ranges[part] = (-high, high) if table.speed else (low, high)
    return ranges
