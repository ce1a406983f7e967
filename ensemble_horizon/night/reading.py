"""Reading one start of one variable: blocks reduced where they are read, and gathered here."""

from __future__ import annotations

import logging
from collections.abc import Callable, Iterator
from dataclasses import dataclass, field, replace
from itertools import product

import numpy as np

from ensemble_horizon.errors import InputError
from ensemble_horizon.night.engine import Engine, shared
from ensemble_horizon.runs import Catalogue
from ensemble_horizon.settings.tables import EngineTable
from ensemble_horizon.spread.reduction import Reduction, Summary, empty_summary, reduce_block

BEARABLE = 2  # times engine.block_memory_mib that a block may take before it is spoken of

log = logging.getLogger(__name__)


@dataclass(frozen=True)
class SourceVariable:
    """A variable of the settings as it lies in the files.

    Parameters
    ----------
    name : str
        Name in the settings.
    parts : tuple of str
        One source name, or two: the components of a vector whose magnitude is meant, or, where
        the reduction has a geometry, the coordinates of a position.
    reduction : Reduction
    """

    name: str
    parts: tuple[str, ...]
    reduction: Reduction


@dataclass(frozen=True)
class ReadingContext:
    """What every reading task needs: sent to each worker once."""

    catalogue: Catalogue
    variables: tuple[SourceVariable, ...]


@dataclass(frozen=True)
class Block:
    """One task: variable and start by position, a range of leads, a window of the grid."""

    variable: int
    start: int
    leads: tuple[int, int]
    window: tuple[tuple[int, int], ...]
    without: tuple[int, ...] = ()  # members not to be used, by position


# Why a member cannot be read, by (lead, member), both by position.
Damage = dict[tuple[int, int], str]


@dataclass
class Reading:
    """One start of one variable, and the fields that could not be read; those count as NaN."""

    summary: Summary
    damage: Damage = field(default_factory=dict)


def read_block(block: Block) -> Reading:
    """Read one block of all members and reduce it: runs in a worker."""
    context: ReadingContext = shared()
    variable = context.variables[block.variable]
    catalogue = context.catalogue
    damage: Damage = {}
    parts = [read_part(catalogue, name, block, damage) for name in variable.parts]
    reduction = variable.reduction
    if len(parts) == 2 and reduction.geometry is None:
        parts = [np.hypot(parts[0], parts[1], out=parts[0])]
    parts = [values.reshape(*values.shape[:2], -1) for values in parts]
    if block.without:
        for values in parts:
            values[list(block.without)] = np.nan
    points = window_points(catalogue.grid.shape, block.window)
    return Reading(reduce_block(parts[0], reduction, points, *parts[1:]), damage)


def read_part(catalogue: Catalogue, name: str, block: Block, damage: Damage) -> np.ndarray:
    """Values (member, lead, *window); field by field where a file does not let itself be read."""
    leads = list(range(*block.leads))
    window = tuple(slice(*bounds) for bounds in block.window)
    try:
        return catalogue.read(name, block.start, leads, slice(None), window)
    except InputError:
        shape = [stop - first for first, stop in block.window]
        members = len(catalogue.members)
        values = np.full((members, len(leads), *shape), np.nan, dtype=catalogue.dtype(name))
    for member in set(range(members)) - set(block.without):
        try:
            values[member] = catalogue.read(name, block.start, leads, member, window)[0]
        except InputError:
            for row, lead in enumerate(leads):
                try:
                    part = catalogue.read(name, block.start, lead, member, window)
                    values[member, row] = part[0, 0]
                except InputError as error:
                    path = catalogue.file_of_member(name, block.start, member) or error.culprit
                    damage[lead, member] = f"{error.found} [{path}]"
    return values


def read_start(
    engine: Engine,
    context: ReadingContext,
    variable: int,
    start: int,
    block_bytes: int,
    advance: Callable[[int], None],
    without: tuple[int, ...] = (),
) -> Reading:
    """Read one start of one variable through the engine.

    Parameters
    ----------
    advance : callable
        Called with the number of leads that each finished block adds.
    without : tuple of int
        Positions of members that must not be used at this start.
    """
    blocks = [
        replace(block, without=without)
        for block in plan_blocks(
            context.catalogue, context.variables[variable].parts, variable, start, block_bytes
        )
    ]
    catalogue = context.catalogue
    reduction = context.variables[variable].reduction
    members, leads = len(catalogue.members), catalogue.leads.size
    found = Reading(empty_summary(reduction, members, leads, reduction.size))
    for number, part in engine.run(read_block, blocks):
        block = blocks[number]
        points = window_points(catalogue.grid.shape, block.window)
        found.summary.add(part.summary, slice(*block.leads), points)
        found.damage |= part.damage
        advance(block.leads[1] - block.leads[0])
    return found


def plan_blocks(
    catalogue: Catalogue, parts: tuple[str, ...], variable: int, start: int, block_bytes: int
) -> Iterator[Block]:
    """Blocks of one start that follow the files' own chunks."""
    blocks = catalogue.blocks(parts, start, block_bytes)
    for leads in blocks.leads:
        for window in product(*blocks.axes):
            yield Block(variable, start, leads, window)


def block_budget(table: EngineTable) -> int:
    """Bytes of values in one block: a third of the memory, as they are held up to three times."""
    return table.block_memory_mib * 2**20 // 3


def warn_of_large_blocks(context: ReadingContext, number: int, table: EngineTable) -> None:
    """Log it where chunks make the blocks of a variable larger than the settings allow."""
    catalogue, variable = context.catalogue, context.variables[number]
    blocks = catalogue.blocks(variable.parts, 0, block_budget(table))
    allowed = table.block_memory_mib * 2**20
    if blocks.size > BEARABLE * allowed:
        spans = (blocks.leads, *blocks.axes)
        shape = (max(stop - first for first, stop in span) for span in spans)
        members = len(catalogue.members)
        log.warning("%s", too_large(variable.name, (members, *shape), blocks.size, allowed))


def too_large(name: str, block: tuple[int, ...], size: int, allowed: int) -> str:
    """Say that chunks do not let blocks become as small as the settings allow.

    Examples
    --------
    >>> print(too_large("t2", (50, 41, 721, 1440), 8_512_560_000, 192 * 2**20))
    t2: one task takes 8118 MiB (50 members x 41 leads x 721 x 1440), more than \
engine.block_memory_mib = 192, because a chunk cannot be read in part; lower engine.workers if \
memory is short, or rewrite the files with smaller chunks
    """
    members, leads, *window = block
    shape = " x ".join([f"{members} members", f"{leads} leads", *map(str, window)])
    return (
        f"{name}: one task takes {size / 2**20:.0f} MiB ({shape}), more than "
        f"engine.block_memory_mib = {allowed // 2**20}, because a chunk cannot be read in part; "
        "lower engine.workers if memory is short, or rewrite the files with smaller chunks"
    )


def window_points(shape: tuple[int, ...], window: tuple[tuple[int, int], ...]) -> np.ndarray | None:
    """Positions of a window in the flattened grid; None for the whole grid."""
    if all(first == 0 and stop == size for (first, stop), size in zip(window, shape, strict=True)):
        return None
    index = np.arange(int(np.prod(shape))).reshape(shape)
    return index[tuple(slice(*bounds) for bounds in window)].ravel()
