"""How fast this machine reads and fits, from a short sample: a few blocks, and made-up curves."""

from __future__ import annotations

import math
from dataclasses import dataclass, replace
from time import perf_counter

import numpy as np

from ensemble_horizon.horizon.map_limits import MapOptions
from ensemble_horizon.night.engine import Engine
from ensemble_horizon.night.mapping import FieldNoise, Fields, map_fields
from ensemble_horizon.night.reading import Block, ReadingContext, plan_blocks, read_block
from ensemble_horizon.night.variables import Variable
from ensemble_horizon.runs import Catalogue
from ensemble_horizon.spread.sample import SampleLayout
from ensemble_horizon.spread.sampling import LeadNoise

SAMPLE_BYTES = 192 * 2**20  # that come out of the chunks, of all blocks of a sample together
_POINTS = 2048


@dataclass(frozen=True)
class Pace:
    """What was measured in one process.

    Parameters
    ----------
    values : int
        Bytes that came out of the chunks for the sample.
    rates : tuple of float
        Seconds per byte of values of each block: reading and reducing.
    """

    values: int
    rates: tuple[float, ...]


def reading_pace(context: ReadingContext, budget: int, overhead: float = 1.0) -> Pace | None:
    """Read the first block of the first start and the last of the last, or what is small of them.

    Of large blocks only some members are read, and the time is scaled by the chunks left out.

    Parameters
    ----------
    budget : int
        Bytes of a block, see `plan_blocks`.
    overhead : float
        Bytes that come out of the chunks for each byte of values.

    Returns
    -------
    Pace, or None where even one member of a block is more than a sample may hold.
    """
    starts = context.catalogue.starts.size
    ends = [
        list(plan_blocks(context.catalogue, context.variables[number].parts, number, start, budget))
        for number, start in ((0, 0), (len(context.variables) - 1, starts - 1))
    ]
    blocks = list(dict.fromkeys((ends[0][0], ends[1][-1])))
    for chosen in (blocks, blocks[:1]):
        most = SAMPLE_BYTES / overhead / len(chosen)
        parts = [_some_members(context, block, most) for block in chosen]
        if all(parts):
            break
    else:
        return None
    rates, total = [], 0.0
    for block, part in zip(chosen, parts, strict=True):
        fewer, size = part or (context, 0.0)
        with Engine(1, fewer) as engine:
            begun = perf_counter()
            list(engine.run(read_block, [block]))
            rates.append((perf_counter() - begun) / size)
        total += size * overhead
    return Pace(round(total), tuple(rates))


def _some_members(
    context: ReadingContext, block: Block, most: float
) -> tuple[ReadingContext, float] | None:
    """As many members as come to ``most`` bytes, and those bytes; members share chunks at times."""
    catalogue, parts = context.catalogue, context.variables[block.variable].parts
    point = sum(catalogue.dtype(name).itemsize for name in parts)
    window = math.prod(stop - first for first, stop in block.window)
    size = point * len(catalogue.members) * (block.leads[1] - block.leads[0]) * window
    whole = _chunks(catalogue, parts, block)
    count = len(catalogue.members)
    while count:
        fewer = catalogue.subset(members=range(count))
        bytes_here = size * _chunks(fewer, parts, block) / max(1, whole)
        if 0 < bytes_here <= most:
            return replace(context, catalogue=fewer), bytes_here
        count //= 2
    return None


def _chunks(catalogue: Catalogue, parts: tuple[str, ...], block: Block) -> int:
    total = 0
    for name in parts:
        _, lead, chunk = catalogue.chunks(name, block.start)
        here = (lead >= block.leads[0]) & (lead < block.leads[1])
        total += np.unique(chunk[here]).size
    return total


def fitting_pace(catalogue: Catalogue, variable: Variable, options: MapOptions) -> float:
    """Seconds per point of the maps of a variable, from logistic curves of many rates."""
    lead, count = catalogue.leads, min(_POINTS, math.prod(catalogue.grid.shape))
    rng = np.random.default_rng(0)
    span = max(float(lead[-1] - lead[0]), 1.0)
    rate = rng.uniform(2, 12, count) / span
    scatter = rng.chisquare(max(options.members - 1, 1), (lead.size, count)) / options.members
    growing = 1 / (1 + 20 * np.exp(-rate * (lead[:, np.newaxis] - lead[0])))
    variance = (growing**2 * scatter).astype(np.float32)
    share = np.repeat(variance[np.newaxis], len(variable.distances), axis=0)
    apart = np.abs(np.subtract.outer(lead, lead)) / span
    noise = LeadNoise(np.full(lead.size, float(max(options.members - 1, 1))), np.exp(-5 * apart))
    nowhere = np.zeros(count, dtype=int)
    climatology = None if variable.climatology is None else variable.climatology[:count]
    with Engine(1) as engine:
        begun = perf_counter()
        map_fields(
            engine,
            lead,
            Fields(
                variance, share if len(variable.distances) else None, FieldNoise((noise,), noise)
            ),
            replace(variable, climatology=climatology),
            SampleLayout(np.arange(count), nowhere, nowhere),
            options,
        )
        return (perf_counter() - begun) / count
