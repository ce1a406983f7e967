"""What an estimate would read, hold and write, and how long it would take: nothing is written.

Everything but the time follows from the headers. The time is scaled from a short sample
(`ensemble_horizon.night.pace`).
"""

from __future__ import annotations

import math
from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from pathlib import Path
from time import perf_counter

import numpy as np

from ensemble_horizon.night.engine import workers_for
from ensemble_horizon.night.input import open_input
from ensemble_horizon.night.mapping import MapPlan, map_options, map_plan
from ensemble_horizon.night.pace import Pace, fitting_pace, reading_pace
from ensemble_horizon.night.reading import (
    BEARABLE,
    ReadingContext,
    block_budget,
    plan_blocks,
    too_large,
)
from ensemble_horizon.night.variables import Variable, layout_of, resolve_places, resolve_variable
from ensemble_horizon.runs import Catalogue
from ensemble_horizon.runs.volume import Volume, volume_of
from ensemble_horizon.settings import Settings

_LIBRARIES = 200 * 2**20  # the scientific libraries in the process that was started
_OWN_PAGES = 60 * 2**20  # what a worker, a copy of that process, comes to own of them
_CALL = 64 * 2**20  # at most, what one call reads and what is made of it beside the values
_SHARING = 0.5  # at least, what each further worker adds to the speed of one
_START_UP = 3.0  # seconds: loading libraries, curves, tables


@dataclass(frozen=True)
class VariablePlan:
    """The reading of one variable.

    Parameters
    ----------
    name : str
    volumes : tuple of Volume
        One of each source name.
    tasks : int
        Blocks of all starts.
    block : tuple of int
        Members, leads and window of the largest block.
    block_bytes : int
        Bytes of its values.
    """

    name: str
    volumes: tuple[Volume, ...]
    tasks: int
    block: tuple[int, ...]
    block_bytes: int

    @property
    def values(self) -> int:
        """Bytes of values before compression."""
        return sum(volume.values for volume in self.volumes)

    @property
    def overhead(self) -> float:
        """Bytes that come out of the chunks for each byte of values."""
        return sum(volume.unpacked for volume in self.volumes) / max(1, self.values)


@dataclass(frozen=True)
class Plan:
    """What an estimate would come to.

    Parameters
    ----------
    starts, members, leads : int
    grid : tuple of int
    files : int
        Files that hold values of any variable.
    variables : tuple of VariablePlan
    workers : int
    allowed : int
        Bytes of a block that ``engine.block_memory_mib`` allows.
    task, kept, whole : int
        Bytes in memory, about: of one task, of what the process that was started keeps, and of all
        processes together.
    pace : Pace, or None where no sample could be taken
    curve : float
        Seconds per point of a map; zero without maps.
    seconds : (shortest, longest), or None
    products : tuple of str
        Files below ``folder``, figures as their number.
    folder : Path
    """

    starts: int
    members: int
    leads: int
    grid: tuple[int, ...]
    files: int
    variables: tuple[VariablePlan, ...]
    workers: int
    allowed: int
    task: int
    kept: int
    whole: int
    pace: Pace | None
    curve: float
    seconds: tuple[float, float] | None
    products: tuple[str, ...]
    figures: int
    folder: Path

    @property
    def tasks(self) -> int:
        """Blocks of all variables."""
        return sum(variable.tasks for variable in self.variables)

    @property
    def warnings(self) -> Iterator[str]:
        """What there is to be told of chunks that do not suit the settings."""
        for variable in self.variables:
            if variable.block_bytes > BEARABLE * self.allowed:
                yield too_large(variable.name, variable.block, variable.block_bytes, self.allowed)
            chunks = sum(volume.chunks for volume in variable.volumes)
            reads = sum(volume.reads for volume in variable.volumes)
            if reads > chunks:
                yield (
                    f"{variable.name}: {chunks} chunks are decompressed {reads} times, because "
                    "they hold several starts each and starts are read one by one; choose "
                    "runs.starts, or rewrite the files with one start a chunk"
                )


def plan_estimate(settings: Settings) -> Plan:
    """Plan an estimate: headers are read, and a few blocks of values for the time.

    Raises
    ------
    InputError, SettingsError
        As `ensemble_horizon.night.estimate.estimate`.
    """
    begun = perf_counter()
    catalogue = open_input(settings).catalogue
    headers = perf_counter() - begun
    places, layout = resolve_places(settings, catalogue), layout_of(catalogue)
    variables = [resolve_variable(settings, catalogue, name) for name in settings.variables]
    maps = map_plan(settings, catalogue)
    mapped, size = maps.mode != "none", math.prod(catalogue.grid.shape)
    sources = tuple(item.source(places, layout, size, mapped) for item in variables)
    context = ReadingContext(catalogue, sources)
    budget = block_budget(settings.engine)
    planned = tuple(_planned(context, number, budget) for number in range(len(variables)))
    wanted = 4 * size * len(catalogue.members) * catalogue.leads.size * catalogue.starts.size
    workers = workers_for(settings.engine.workers, wanted * len(variables))
    kept = _kept(catalogue, variables, maps, layout.index.size)
    task = max(_held(item, catalogue, mapped) for item in planned)
    pace = reading_pace(context, budget, max(1.0, *(item.overhead for item in planned)))
    curve = 0.0
    if mapped:
        options = map_options(settings, maps, variables[0], len(catalogue.members))
        curve = fitting_pace(catalogue, variables[0], options)
    drawn = _maps_each(catalogue, maps)
    products, figures = _products(settings, catalogue, variables, drawn)
    return Plan(
        starts=catalogue.starts.size,
        members=len(catalogue.members),
        leads=catalogue.leads.size,
        grid=catalogue.grid.shape,
        files=_files(catalogue, variables),
        variables=planned,
        workers=workers,
        allowed=settings.engine.block_memory_mib * 2**20,
        task=task,
        kept=kept,
        whole=_LIBRARIES + kept + workers * (task + (_OWN_PAGES if workers > 1 else 0)),
        pace=pace,
        curve=curve,
        seconds=_seconds(pace, planned, headers, curve * size * drawn * len(variables), workers),
        products=products,
        figures=figures,
        folder=settings.path(settings.products.folder).resolve(),
    )


def _planned(context: ReadingContext, number: int, budget: int) -> VariablePlan:
    catalogue, variable = context.catalogue, context.variables[number]
    tasks, largest, size = 0, (0, 0), 0
    window: tuple[int, ...] = ()
    for start in range(catalogue.starts.size):
        for block in plan_blocks(catalogue, variable.parts, number, start, budget):
            tasks += 1
            shape = tuple(stop - first for first, stop in block.window)
            here = (block.leads[1] - block.leads[0]) * math.prod(shape)
            if here > size:
                size, largest, window = here, block.leads, shape
    point = sum(catalogue.dtype(name).itemsize for name in variable.parts)
    members = len(catalogue.members)
    return VariablePlan(
        variable.name,
        tuple(volume_of(catalogue, name) for name in variable.parts),
        tasks,
        (members, largest[1] - largest[0], *window),
        size * point * members,
    )


def _held(plan: VariablePlan, catalogue: Catalogue, mapped: bool) -> int:
    """Bytes of one task: its values, one call of the library, and the fields that it gives."""
    _, leads, *window = plan.block
    fields = 4 * leads * math.prod(window) if mapped else 0
    return plan.block_bytes + min(_CALL, 2 * plan.block_bytes) + 2 * fields


def _kept(catalogue: Catalogue, variables: Sequence[Variable], maps: MapPlan, sample: int) -> int:
    """Bytes of fields at all points: of the start under way, of all pooled, and of the maps."""
    size, leads = math.prod(catalogue.grid.shape), catalogue.leads.size
    samples = 4 * leads * len(catalogue.members) * sample
    if maps.mode == "none":
        return samples
    intervals = maps.confidence is not None
    field = 4 * leads * size
    most = max(1 + len(item.distances) for item in variables)
    held = field * most
    if maps.mode == "pooled":
        held += 2 * field * most + field // 2
        samples += 4 * leads * sample * catalogue.starts.size
    made = 0
    for item in variables:
        point = 17 + 32 * intervals + len(item.criteria) * (9 + 8 * intervals)
        made += point * size * _maps_each(catalogue, maps)
    return samples + held + 2 * made + 24 * size


def _maps_each(catalogue: Catalogue, maps: MapPlan) -> int:
    """How many starts there are maps of."""
    return {"none": 0, "pooled": 1, "each": catalogue.starts.size}[maps.mode]


def _seconds(
    pace: Pace | None,
    planned: Sequence[VariablePlan],
    headers: float,
    fits: float,
    workers: int,
) -> tuple[float, float] | None:
    if pace is None:
        return None
    values = sum(item.values for item in planned)
    short = (min(pace.rates) * values + fits) / workers
    long = (max(pace.rates) * values + fits) / (1 + _SHARING * (workers - 1))
    return headers + short, headers + long + _START_UP


def _files(catalogue: Catalogue, variables: Sequence[Variable]) -> int:
    names = {part for item in variables for part in item.parts}
    tables = (catalogue.tables[catalogue.table_of[name]].source for name in names)
    numbers = np.unique(np.concatenate([np.unique(table) for table in tables]))
    return len({catalogue.sources[int(number)].path for number in numbers if number >= 0})


def _products(
    settings: Settings, catalogue: Catalogue, variables: Sequence[Variable], drawn: int
) -> tuple[tuple[str, ...], int]:
    """Names of the files, and the number of figures beside them."""
    starts = catalogue.starts.size
    shares = starts > 1 and catalogue.leads.size > 1
    names = ["horizons.csv", "horizons.nc"]
    if drawn:
        names.append("horizon_maps.nc")
    if shares:
        names.append("time_to_limit.csv")
    names.append("README.txt")
    if not settings.products.figures:
        return tuple(names), 0
    curves = starts + 1 if starts > 1 else starts
    each = sum(curves + shares + drawn * len(item.criteria) for item in variables)
    return tuple(names), each
