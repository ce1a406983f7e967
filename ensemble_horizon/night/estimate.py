"""Estimate: from the files of the settings to curves, fits, limits and maps."""

from __future__ import annotations

import logging
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from dataclasses import dataclass, field
from time import monotonic

import numpy as np

from ensemble_horizon.horizon.curve_growth import growth_of_curves
from ensemble_horizon.horizon.curve_limits import Curve, limits_of_curve
from ensemble_horizon.night.calibrated import Calibrated, calibrated
from ensemble_horizon.night.curves import curves_of_start, members_of_start, pool_starts
from ensemble_horizon.night.engine import Engine, cluster_of, workers_for
from ensemble_horizon.night.health import faults_of, too_few, unusable
from ensemble_horizon.night.input import Input, open_input
from ensemble_horizon.night.mapping import (
    Fields,
    MapPlan,
    PooledFields,
    map_fields,
    map_options,
    map_plan,
    noise_of_start,
)
from ensemble_horizon.night.reading import (
    ReadingContext,
    block_budget,
    read_start,
    warn_of_large_blocks,
)
from ensemble_horizon.night.results import (
    ALL_STARTS,
    CurveRow,
    Frame,
    VariableResult,
    curves_dataset,
    maps_dataset,
)
from ensemble_horizon.night.variables import (
    Places,
    Variable,
    layout_of,
    resolve_places,
    resolve_variable,
)
from ensemble_horizon.runs import Catalogue, Fault
from ensemble_horizon.runs.verdict import name_members
from ensemble_horizon.settings import Settings
from ensemble_horizon.spread.kurtosis import pooled_kurtosis
from ensemble_horizon.spread.reduction import Summary
from ensemble_horizon.spread.sample import SampleLayout

log = logging.getLogger(__name__)
Progress = Callable[[str, float, float], None]


def silent(stage: str, done: float, total: float) -> None:
    """A progress callback that shows nothing."""


@dataclass
class Estimate:
    """What an estimate found.

    results : one per variable, in the order of the settings
    places : regions and sites on the grid
    catalogue : the files used
    faults : what was wrong with the input, headers and values
    """

    results: list[VariableResult]
    places: Places
    catalogue: Catalogue
    faults: list[Fault] = field(default_factory=list)


def estimate(settings: Settings, progress: Progress = silent) -> Estimate:
    """Read the runs, measure spread, fit growth, and place the limits.

    Parameters
    ----------
    settings : Settings
    progress : callable
        Called with the name of a stage, what is done of it, and its total.

    Raises
    ------
    InputError
        if the files cannot be used, and why.
    SettingsError
        if the settings ask for what the files do not hold.
    """
    with _timed("headers"):
        found = open_input(settings, lambda done, total: progress("headers", done, total))
    return estimate_input(settings, found, map_plan(settings, found.catalogue), progress)


def estimate_input(
    settings: Settings, found: Input, plan: MapPlan, progress: Progress = silent
) -> Estimate:
    """`estimate` of an input whose headers have been read, with maps as planned."""
    catalogue = found.catalogue
    places = resolve_places(settings, catalogue)
    layout = layout_of(catalogue)
    variables = [resolve_variable(settings, catalogue, name) for name in settings.variables]
    size = int(np.prod(catalogue.grid.shape, dtype=int))
    mapped = plan.mode != "none"
    context = ReadingContext(
        catalogue, tuple(item.source(places, layout, size, mapped) for item in variables)
    )
    factors = calibrated(settings, catalogue, places, variables, maps=mapped)
    job = _Job(settings, context, places, layout, plan, factors, progress)
    wanted = 4 * size * len(catalogue.members) * catalogue.leads.size * catalogue.starts.size
    workers = workers_for(settings.engine.workers, wanted * len(variables))
    cluster = cluster_of(settings.engine, settings.base, catalogue.paths)
    with Engine(workers, context, cluster) as engine:
        results = [job.variable(engine, number, item) for number, item in enumerate(variables)]
    return Estimate(results, places, catalogue, [*found.faults, *job.faults])


class _Job:
    """One estimate under way: what every step needs."""

    def __init__(
        self,
        settings: Settings,
        context: ReadingContext,
        places: Places,
        layout: SampleLayout,
        plan: MapPlan,
        factors: dict[str, Calibrated],
        progress: Progress,
    ) -> None:
        self.settings = settings
        self.context = context
        self.catalogue = context.catalogue
        self.places = places
        self.layout = layout
        self.plan = plan
        self.factors = factors
        self.progress = progress
        self.faults: list[Fault] = []
        self._total = (
            len(settings.variables) * self.catalogue.starts.size * self.catalogue.leads.size
        )
        self._done = 0

    def variable(self, engine: Engine, number: int, variable: Variable) -> VariableResult:
        """All starts of one variable."""
        mode, starts = self.plan.mode, self.catalogue.starts.size
        warn_of_large_blocks(self.context, number, self.settings.engine)
        lines: list[list[Curve]] = []
        members: list[int] = []
        maps: list[dict[str, np.ndarray]] = []
        pooled = PooledFields(self.layout)
        for start in range(starts):
            summary = self._read(engine, number, variable, start)
            kurtosis = pooled_kurtosis(summary.sample_values)
            lines.append(curves_of_start(summary, variable, self.places, kurtosis))
            members.append(members_of_start(summary))
            if mode == "none":
                continue
            noise = noise_of_start(summary, self.layout, kurtosis)
            if mode == "pooled":
                pooled.add(summary, noise)
            else:
                assert summary.variance is not None
                fields = Fields(summary.variance, summary.share, noise)
                maps.append(self._map(engine, fields, variable, members[-1]))
        if mode == "pooled":
            fields = pooled.fields(self.settings.growth.confidence)
            maps.append(self._map(engine, fields, variable, max(members)))
        return self._result(variable, lines, members, maps)

    def _read(self, engine: Engine, number: int, variable: Variable, start: int) -> Summary:
        without: frozenset[int] = frozenset()
        known: list[Fault] = []
        block_bytes = block_budget(self.settings.engine)
        while True:
            with _timed(f"reading {variable.name} {self.catalogue.start_label(start)}"):
                reading = read_start(
                    engine, self.context, number, start, block_bytes, self._advance,
                    tuple(sorted(without)),
                )  # fmt: skip
            faults = faults_of(
                reading.summary, reading.damage, self.catalogue, variable, start, without
            )
            faults = [item for item in faults if item not in known]
            known += faults
            self.faults += faults
            bad = unusable(faults, self.catalogue, self.settings.runs.incomplete) - without
            without |= bad
            self._require_enough(reading.summary, variable, start, without)
            if not bad:
                return reading.summary
            self._total += self.catalogue.leads.size
            log.warning(
                "%s at %s: reading again without %s",
                variable.name, self.catalogue.start_label(start), self._names(without),
            )  # fmt: skip

    def _require_enough(
        self, summary: Summary, variable: Variable, start: int, without: frozenset[int]
    ) -> None:
        label = self.catalogue.start_label(start)
        causes = [i for i in self.faults if (i.variable, i.start) == (variable.name, label)]
        least = self.settings.runs.minimum_members
        refusal = too_few(summary, f"{variable.name} at {label}", causes, without, least)
        if refusal is not None:
            raise refusal

    def _names(self, positions: frozenset[int]) -> str:
        return name_members([self.catalogue.members[i] for i in sorted(positions)])

    def _advance(self, leads: int) -> None:
        self._done += leads
        self.progress("reading", self._done, self._total)

    def _map(
        self, engine: Engine, fields: Fields, variable: Variable, members: int
    ) -> dict[str, np.ndarray]:
        options = map_options(self.settings, self.plan, variable, members)
        if variable.name in self.factors:
            fields = self.factors[variable.name].fields(fields, self.layout)
        with _timed(f"mapping {variable.name}"):
            return map_fields(engine, self.catalogue.leads, fields, variable, self.layout, options)

    def _result(
        self,
        variable: Variable,
        lines: list[list[Curve]],
        members: list[int],
        maps: list[dict[str, np.ndarray]],
    ) -> VariableResult:
        catalogue, growth = self.catalogue, self.settings.growth
        frame = Frame(
            variable=variable.name,
            long_name=variable.long_name,
            units=variable.units,
            lead=catalogue.leads,
            lead_units=catalogue.lead_units,
            criteria=variable.criteria,
            confidence=growth.confidence,
            hold=variable.hold,
        )
        labels = [catalogue.start_label(start) for start in range(catalogue.starts.size)]
        starts = catalogue.starts
        curve_labels, curve_starts = labels, starts
        if len(lines) > 1:
            pooled = [pool_starts(same, growth.confidence) for same in zip(*lines, strict=True)]
            lines, members = [*lines, pooled], [*members, max(members)]
            curve_labels = [*labels, ALL_STARTS]
            curve_starts = np.concatenate([starts, _no_start(starts)])
        if variable.name in self.factors:
            # After the pooling: the noise of the factor is the same in all starts.
            lines = [self.factors[variable.name].curves(line) for line in lines]
        rows = [
            self._rows(line, variable, count) for line, count in zip(lines, members, strict=True)
        ]
        curves = curves_dataset(frame, curve_starts, curve_labels, self.places.names, rows)
        grid = catalogue.grid
        space = (grid.dims, grid.shape, dict(grid.coords))
        if not maps:
            return VariableResult(curves, None)
        if self.plan.mode == "pooled":
            starts, labels = curve_starts[-1:], [ALL_STARTS]
        return VariableResult(curves, maps_dataset(frame, starts, labels, space, maps))

    def _rows(self, line: list[Curve], variable: Variable, members: int) -> list[CurveRow]:
        lead, growth = self.catalogue.leads, self.settings.growth
        spreads = np.stack([curve.spread for curve in line])
        fits = growth_of_curves(
            lead, spreads, [c.noise for c in line], growth.law, growth.scale, growth.confidence
        )
        criteria = list(variable.criteria.values())
        return [
            CurveRow(
                curve,
                fit,
                limits_of_curve(lead, curve, fit, criteria, variable.hold, growth.confidence),
                members,
            )
            for curve, fit in zip(line, fits, strict=True)
        ]


def _no_start(starts: np.ndarray) -> np.ndarray:
    empty = np.datetime64("NaT", "ns") if starts.dtype.kind == "M" else None
    return np.array([empty], dtype=starts.dtype)


@contextmanager
def _timed(stage: str) -> Iterator[None]:
    begun = monotonic()
    yield
    log.info("%s: %.2f s", stage, monotonic() - begun)
