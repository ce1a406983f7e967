"""What the runs are held against: analyses and observations at the valid times."""

from __future__ import annotations

import logging
from dataclasses import dataclass

import numpy as np

from ensemble_horizon.errors import InputError, SettingsError
from ensemble_horizon.night.variables import Places, Variable
from ensemble_horizon.night.verification.gaps import Gap, tell_gaps
from ensemble_horizon.runs import Catalogue, read_catalogue
from ensemble_horizon.runs.files import Files
from ensemble_horizon.runs.observations import Observations, read_observations
from ensemble_horizon.runs.times import STANDARD
from ensemble_horizon.runs.units import converter
from ensemble_horizon.settings import Settings

log = logging.getLogger(__name__)


@dataclass(frozen=True)
class Analyses:
    """Analyses of one variable, and where each valid time of the runs lies among them.

    Parameters
    ----------
    catalogue : Catalogue
        Every analysis is a start of it.
    parts : tuple of str
        Source names, as many as those of the variable.
    scales : tuple of (scale, offset)
        Turn values of each part into the units of the runs.
    position : (S, L) int, -1 where there is no analysis
    at_start : (S,) int, the analysis at the start itself
    """

    catalogue: Catalogue
    parts: tuple[str, ...]
    scales: tuple[tuple[float, float], ...]
    position: np.ndarray
    at_start: np.ndarray


@dataclass(frozen=True)
class Observed:
    """Observations of one variable at K sites, in the units of the runs.

    Parameters
    ----------
    sites : tuple of str
    index : (K,) int into the flattened grid
    values : (S, L, K), NaN where there is none
    at_start : (S, K)
    """

    sites: tuple[str, ...]
    index: np.ndarray
    values: np.ndarray
    at_start: np.ndarray


def require_truth(settings: Settings) -> None:
    """Refuse settings that name nothing to verify against.

    Raises
    ------
    SettingsError
    """
    if settings.analyses is None and not settings.observations:
        raise SettingsError(
            "analyses",
            expected="a table [analyses] with the files, or tables [observations.NAME]",
            found="neither",
            remedy="name what the runs are to be verified against",
        )
    for name, table in settings.variables.items():
        if table.position is not None:
            raise SettingsError(
                f"variables.{name}.position",
                expected="scalars and speeds, which verify compares",
                found="a position",
                remedy="verify with settings that leave this variable out",
            )


def analysis_catalogue(settings: Settings, name: str, files: Files | None = None) -> Catalogue:
    """The headers of the analyses of a variable: of some files, or of all that are named.

    Raises
    ------
    SettingsError
        if none are named, or a vector and a scalar are confused.
    InputError
        if they cannot be used.
    """
    parts = _analysis_parts(settings, name)
    level = settings.variables[name].level
    assert settings.analyses is not None
    catalogue = read_catalogue(
        settings.files(settings.analyses.files) if files is None else files,
        variables=parts,
        level=None if level is None else dict.fromkeys(parts, level),
        analysis=True,
    )
    for fault in catalogue.faults:
        log.warning("analyses: %s: %s", fault.file, fault.message)
    return catalogue


def _analysis_parts(settings: Settings, name: str) -> tuple[str, ...]:
    """Source names of a variable in the analyses."""
    own = settings.variables[name].sources(name)
    named = own if settings.analyses is None else settings.analyses.names.get(name, own)
    parts = (named,) if isinstance(named, str) else tuple(named)
    if len(parts) != len(own):
        raise SettingsError(
            f"analyses.names.{name}",
            expected=f"{len(own)} names, as the variable has in the runs",
            found=f"{len(parts)}",
            remedy="name the same components in the analyses",
        )
    return parts


def open_analyses_of(
    settings: Settings,
    runs: Catalogue,
    variable: Variable,
    gaps: list[Gap],
    held: Catalogue | None = None,
) -> Analyses | None:
    """Analyses of a variable at the valid times of the runs; None where none are named.

    Parameters
    ----------
    held : Catalogue, optional
        Analyses whose headers have been read. With them, a lack at all valid times is a gap like
        any other.

    Raises
    ------
    InputError
        if they lie on another grid, are in other units, or share no valid time with the runs.
    """
    table = settings.analyses
    if table is None:
        return None
    parts = _analysis_parts(settings, variable.name)
    catalogue = analysis_catalogue(settings, variable.name) if held is None else held
    where = f"analyses {table.files!r}"
    difference = runs.grid.difference(catalogue.grid)
    if difference is not None:
        raise InputError(
            where,
            expected=f"the grid of the runs ({runs.grid.describe()})",
            found=difference,
            remedy="interpolate the analyses to the grid of the runs beforehand",
        )
    scales = tuple(
        run_scale(runs, own, catalogue.variables[part].units, f"{part!r} in {where}")
        for own, part in zip(variable.parts, parts, strict=True)
    )
    _same_calendar(runs, catalogue.calendar, where)
    times = catalogue.start_ticks
    wanted = _valid_ticks(runs)
    position = _find(times, wanted)
    there = position >= 0
    tell_gaps(gaps, variable.name, "analysis", where, runs, wanted, times, there, held is None)
    return Analyses(catalogue, parts, scales, position, _find(times, runs.start_ticks))


def read_observed(
    settings: Settings,
    runs: Catalogue,
    variable: Variable,
    places: Places,
    gaps: list[Gap],
    needed: bool = True,
) -> Observed | None:
    """Observations of a variable at the sites of the settings; None where none are named.

    Parameters
    ----------
    needed : bool
        Whether a site without any at all valid times is refused, and not a gap like any other.

    Raises
    ------
    InputError
        if no site of the settings is observed, or at no valid time.
    """
    table = settings.observations.get(variable.name)
    if table is None:
        return None
    path = str(settings.path(table.file))
    found = read_observations(path, time=table.time, site=table.site, value=table.value)
    _same_calendar(runs, "standard", path)
    if needed:
        _tell_rows(found, variable.name)
    chosen = _observed_sites(found, places, variable.name, path)
    if needed:
        _tell_sites(found, places, variable.name)
    scale, offset = 1.0, 0.0
    if table.units is not None:
        key = f"observations.{variable.name}.units"
        scale, offset = converter(table.units, variable.units, key)
    # From the units of the results back to those of the runs.
    scale, offset = scale / variable.factor, (offset - variable.offset) / variable.factor
    wanted = _valid_ticks(runs)
    values = np.full((*wanted.shape, len(chosen)), np.nan)
    at_start = np.full((runs.start_ticks.size, len(chosen)), np.nan)
    for column, number in enumerate(chosen):
        series = found.values[places.sites[number]]
        held = np.array(sorted(series), dtype=np.int64)
        level = np.array([series[int(tick)] for tick in held]) * scale + offset
        for target, ticks in (
            (values[..., column], wanted),
            (at_start[:, column], runs.start_ticks),
        ):
            where = _find(held, ticks)
            target[where >= 0] = level[where[where >= 0]]
        what = f"observation at {places.sites[number]}"
        there = np.isfinite(values[..., column])
        tell_gaps(gaps, variable.name, what, path, runs, wanted, held, there, needed)
    names = tuple(places.sites[number] for number in chosen)
    return Observed(names, places.site_index[chosen], values, at_start)


def _observed_sites(found: Observations, places: Places, variable: str, path: str) -> list[int]:
    """Sites of the settings that are observed, by position."""
    chosen = [n for n, site in enumerate(places.sites) if site in found.values]
    if not chosen:
        raise InputError(
            path,
            expected="observations at a site of the settings "
            f"({', '.join(places.sites) or 'none'})",
            found=f"observations at {', '.join(list(found.values)[:6])}",
            remedy="spell the sites as under [sites] in the settings, or add them there",
        )
    return chosen


def _tell_rows(found: Observations, variable: str) -> None:
    zone = "converted to UTC" if found.with_offset else "without an offset: taken as UTC"
    log.warning("observations of %s: times %s", variable, zone)
    if found.empty:
        log.warning("observations of %s: %d rows without a value", variable, found.empty)


def _tell_sites(found: Observations, places: Places, variable: str) -> None:
    silent = [site for site in places.sites if site not in found.values]
    strange = [site for site in found.values if site not in places.sites]
    if silent:
        log.warning("observations of %s: none at %s", variable, ", ".join(silent))
    if strange:
        log.warning(
            "observations of %s: %s not in the settings, left out", variable, ", ".join(strange)
        )


def run_scale(runs: Catalogue, own: str, units: str | None, what: str) -> tuple[float, float]:
    """Scale and offset that turn values into the units that the runs have for their ``own``.

    Raises
    ------
    InputError
        if the units do not convert, or one of the two has none.
    """
    ours = runs.variables[own].units
    if (ours or "") == (units or ""):
        return 1.0, 0.0
    if not ours or not units:
        raise InputError(
            what,
            expected=f"units {ours!r}, those of {own!r} in the runs" if ours else "no units",
            found=repr(units) if units else "no units in the file",
            remedy="add the units attribute where it is missing",
        )
    try:
        return converter(units, ours, what)
    except SettingsError as error:
        raise InputError(
            what,
            expected=f"units that convert to {ours!r}, those of {own!r} in the runs",
            found=repr(units),
            remedy="correct the units attribute, or name another variable under analyses.names",
        ) from error


def _same_calendar(runs: Catalogue, calendar: str, what: str) -> None:
    if runs.calendar != calendar and not {runs.calendar, calendar} <= set(STANDARD):
        raise InputError(
            what,
            expected=f"times in the calendar of the runs, {runs.calendar!r}",
            found=repr(calendar),
            remedy="give both in one calendar",
        )


def _valid_ticks(runs: Catalogue) -> np.ndarray:
    return np.asarray(runs.start_ticks[:, np.newaxis] + runs.lead_ticks)


def _find(held: np.ndarray, wanted: np.ndarray) -> np.ndarray:
    """Position of each wanted time among the rising ones held, -1 where it is not there."""
    place = np.minimum(np.searchsorted(held, wanted), max(held.size - 1, 0))
    return np.where(held[place] == wanted, place, -1)
