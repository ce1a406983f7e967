"""Verify: the runs of many starts held against analyses and observations, in one pass."""

from __future__ import annotations

import logging
from collections.abc import Mapping
from contextlib import ExitStack
from dataclasses import dataclass, field, replace
from pathlib import Path

import numpy as np
import xarray as xr

from ensemble_horizon.errors import InputError
from ensemble_horizon.night.engine import Engine, cluster_of, workers_for
from ensemble_horizon.night.estimate import Progress, silent
from ensemble_horizon.night.input import Input, open_input
from ensemble_horizon.night.mapping import map_plan
from ensemble_horizon.night.variables import (
    Places,
    Variable,
    resolve_places,
    resolve_variable,
)
from ensemble_horizon.night.verification.cells import grid_cells
from ensemble_horizon.night.verification.climate import (
    climatological_mean,
    only_where,
    usable_deviation,
)
from ensemble_horizon.night.verification.gaps import Gap
from ensemble_horizon.night.verification.maps import (
    MAPPED,
    kept_quantities,
    map_falls,
    mapped_quantities,
    skill_interval,
    skill_of,
)
from ensemble_horizon.night.verification.reading import (
    VerifiedVariable,
    VerifyingContext,
)
from ensemble_horizon.night.verification.results import (
    Frame,
    VerifiedResult,
    maps_dataset,
    result_of_places,
)
from ensemble_horizon.night.verification.scores import limit_levels
from ensemble_horizon.night.verification.scratch import Scratch, scratch_file
from ensemble_horizon.night.verification.sources import (
    Observed,
    open_analyses_of,
    read_observed,
    require_truth,
)
from ensemble_horizon.night.verification.starts import Starts
from ensemble_horizon.runs import Catalogue, Fault
from ensemble_horizon.serial.mean import LEAST_STARTS
from ensemble_horizon.settings import Settings
from ensemble_horizon.skill.reduction import ScoreReduction
from ensemble_horizon.spread.reduction import RegionWeights

_CLIMATOLOGY = {"climatology_crps", "product", "forecast_squared", "anomaly_squared"}

log = logging.getLogger(__name__)


@dataclass
class Verification:
    """What verifying found.

    Parameters
    ----------
    results : one per variable, in the order of the settings
    catalogue : the runs used
    analyses : paths of the analyses
    gaps : valid times that nothing could be held against
    faults : what was wrong with the runs
    left_out : starts with too few usable members, in words
    """

    results: list[VerifiedResult]
    catalogue: Catalogue
    analyses: tuple[str, ...]
    gaps: list[Gap] = field(default_factory=list)
    faults: list[Fault] = field(default_factory=list)
    left_out: list[str] = field(default_factory=list)


def verify(settings: Settings, progress: Progress = silent, *, cells: bool = False) -> Verification:
    """Read runs and analyses once and score the runs.

    Parameters
    ----------
    settings : Settings
        With a table ``[analyses]`` or tables ``[observations.NAME]``.
    progress : callable
        Called with the name of a stage, what is done of it, and its total.
    cells : bool
        Whether sums over coarse cells of the grid are wanted, for a calibration of maps.

    Raises
    ------
    SettingsError
        if there is nothing to verify against, or a variable cannot be verified.
    InputError
        if runs, analyses or observations cannot be used, or do not fit each other.
    """
    require_truth(settings)
    found = open_input(settings, lambda done, total: progress("headers", done, total))
    return verify_input(settings, found, progress, cells=cells)


def verify_input(
    settings: Settings,
    found: Input,
    progress: Progress = silent,
    *,
    cells: bool = False,
    held: Mapping[str, Catalogue] | None = None,
) -> Verification:
    """Verify runs whose headers have been read; otherwise as `verify`.

    Parameters
    ----------
    held : mapping of variable to Catalogue, optional
        Headers of analyses read beforehand, for a part of the starts: a truth that is lacking
        altogether is then a gap like any other, and the results hold sums, but no scores.
    """
    catalogue = found.catalogue
    places = resolve_places(settings, catalogue)
    gaps: list[Gap] = []
    variables = [resolve_variable(settings, catalogue, name, climatology=True)
                 for name in settings.variables]  # fmt: skip
    with_maps = map_plan(settings, catalogue).mode != "none" and settings.analyses is not None
    blocks = grid_cells(catalogue) if cells and with_maps else ()
    sources = tuple(
        _source(settings, catalogue, item, places, gaps, blocks if with_maps else None, held)
        for item in variables
    )
    if held is None:
        _tell_few_starts(catalogue)
    job = _Job(settings, catalogue, progress, scored=held is None)
    size = int(np.prod(catalogue.grid.shape, dtype=int))
    kept = max(len(item.kept) for item in sources)
    bytes_read = 4 * size * len(catalogue.members) * catalogue.leads.size
    bytes_read *= catalogue.starts.size * len(sources)
    opened = [item.analyses.catalogue for item in sources if item.analyses is not None]
    with ExitStack() as stack:
        scratch: Scratch | None = None
        if kept:
            wanted = (kept, catalogue.leads.size, catalogue.starts.size, size)
            scratch = stack.enter_context(scratch_file(*wanted, folder=_shared_folder(settings)))
        context = VerifyingContext(catalogue, sources, scratch)
        workers = workers_for(settings.engine.workers, bytes_read)
        paths = [path for item in (catalogue, *opened) for path in item.paths]
        folder = None if scratch is None else scratch.path.parent
        cluster = cluster_of(settings.engine, settings.base, paths, folder)
        engine = stack.enter_context(Engine(workers, context, cluster))
        results = [
            job.variable(engine, number, variable, sources[number], places)
            for number, variable in enumerate(variables)
        ]
    against = tuple(dict.fromkeys(path for item in opened for path in item.paths))
    faults = [*found.faults, *job.faults]
    return Verification(results, catalogue, against, gaps, faults, job.left_out)


def _shared_folder(settings: Settings) -> Path | None:
    """Where workers elsewhere find a scratch file: beside the products; None for those here."""
    if settings.engine.scheduler is None:
        return None
    products = settings.path(settings.products.folder)
    return next(folder for folder in products.parents if folder.is_dir())


def _source(
    settings: Settings,
    catalogue: Catalogue,
    variable: Variable,
    places: Places,
    gaps: list[Gap],
    cells: tuple[RegionWeights, ...] | None,
    held: Mapping[str, Catalogue] | None,
) -> VerifiedVariable:
    """A variable with all that it is held against; without cells, not even none, no maps."""
    own = None if held is None else held.get(variable.name)
    analyses = open_analyses_of(settings, catalogue, variable, gaps, own)
    observed = read_observed(settings, catalogue, variable, places, gaps, held is None)
    if analyses is None and observed is None:
        raise InputError(
            f"variable {variable.name}",
            expected="analyses or observations of it",
            found="neither in the settings",
            remedy=f"add [analyses] or [observations.{variable.name}]",
        )
    mean = climatological_mean(settings, catalogue, variable)
    deviation = usable_deviation(variable, mean)
    mean = only_where(mean, deviation)
    control = settings.runs.control
    position = catalogue.members.index(control) if control in catalogue.members else None
    absent: set[str] = set() if mean is not None else set(_CLIMATOLOGY)
    absent |= set() if deviation is not None else {"climatology_crps"}
    absent |= {"persistence_crps"} if deviation is not None else set()
    fields = mapped_quantities(absent) if cells is not None and analyses is not None else ()
    size = int(np.prod(catalogue.grid.shape, dtype=int))
    sites = [
        RegionWeights(name, np.array([index]), np.ones(1))
        for name, index in zip(places.sites, places.site_index, strict=True)
    ]
    every = (*places.regions, *sites, *(cells or ()))
    reduction = ScoreReduction(size, every, position, mean, deviation, fields)
    return VerifiedVariable(
        variable.name, variable.parts, variable.plausible, reduction, analyses, observed,
        _at_sites(observed, reduction), kept_quantities(fields),
    )  # fmt: skip


def _at_sites(observed: Observed | None, whole: ScoreReduction) -> ScoreReduction:
    """The reduction of the observed sites: a grid of their own, one place a site."""
    if observed is None:
        return ScoreReduction(0)
    number = observed.index.size
    places = tuple(
        RegionWeights(name, np.array([k]), np.ones(1)) for k, name in enumerate(observed.sites)
    )
    mean, deviation = (
        None if item is None else item[observed.index] for item in (whole.mean, whole.deviation)
    )
    return ScoreReduction(number, places, whole.control, mean, deviation)


def _tell_few_starts(catalogue: Catalogue) -> None:
    if catalogue.starts.size < LEAST_STARTS:
        log.warning(
            "runs: %d %s: scores are given without intervals, which need %d starts",
            catalogue.starts.size, "start" if catalogue.starts.size == 1 else "starts",
            LEAST_STARTS,
        )  # fmt: skip


class _Job:
    """One verification under way: what every step needs."""

    def __init__(
        self, settings: Settings, catalogue: Catalogue, progress: Progress, scored: bool
    ) -> None:
        self.settings = settings
        self.catalogue = catalogue
        self.progress = progress
        self.scored = scored
        self.faults: list[Fault] = []
        self.left_out: list[str] = []
        self._done = 0
        self._total = len(settings.variables) * catalogue.starts.size * catalogue.leads.size

    def variable(
        self,
        engine: Engine,
        number: int,
        variable: Variable,
        source: VerifiedVariable,
        places: Places,
    ) -> VerifiedResult:
        """All starts of one variable, scored if that is wanted."""
        settings = self.settings
        read = Starts(settings, self.catalogue, number, variable, source)
        read.read(engine, self._advance)
        maps, against = read.maps, read.sums
        self.faults += read.faults
        self.left_out += read.left_out
        levels = limit_levels(settings.verification.skill, settings.verification.correlation)
        confidence, lead = settings.growth.confidence, self.catalogue.leads
        frame = Frame(
            variable.name, variable.long_name, variable.units, lead, self.catalogue.lead_units,
            confidence, self.catalogue.starts.size - len(read.left_out),
            len(self.catalogue.members), levels, settings.verification.resamples,
        )  # fmt: skip
        kinds = {"analysis": places.names}
        if source.observed is not None:
            kinds["observation"] = [(name, "site") for name in source.observed.sites]
        if not self.scored:
            return VerifiedResult(xr.Dataset(), None, frame, kinds, against, variable.factor)
        alone = result_of_places(frame, kinds, against, variable.factor)
        if not maps.total:
            return alone
        scores = maps.scores(variable.factor)
        interval: dict[str, tuple[np.ndarray, np.ndarray]] = {}
        name = skill_of(source.kept)
        if name is not None:
            mean, value, *ends = skill_interval(engine, lead.size, maps.size, confidence)
            scores |= {"crps": mean * np.float32(variable.factor), name: value}
            scores = {known: scores[known] for known in MAPPED if known in scores}
            interval[name] = (ends[0], ends[1])
        falls = map_falls(lead, scores, levels, interval)
        data = maps_dataset(frame, self.catalogue.grid, scores, falls, interval)
        return replace(alone, maps=data)

    def _advance(self, done: int, more: int) -> None:
        self._done += done
        self._total += more
        self.progress("verifying", self._done, self._total)
