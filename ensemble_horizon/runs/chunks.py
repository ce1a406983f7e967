"""Chunks of the files, and how one start is cut into blocks so that each is read once.

A file is compressed chunk by chunk: who wants one value of a chunk pays for all of it. A block is
therefore made of whole chunks, in every file that it touches.
"""

from __future__ import annotations

import math
from collections.abc import Iterable, Sequence
from dataclasses import dataclass
from itertools import pairwise

import numpy as np
import numpy.typing as npt

from ensemble_horizon.runs.sources import Source

Span = tuple[int, int]


@dataclass(frozen=True)
class Blocks:
    """How one start is cut: spans of leads, and spans along each dimension of the grid.

    ``size`` is the number of bytes of values, all members, in the largest block.
    """

    leads: tuple[Span, ...]
    axes: tuple[tuple[Span, ...], ...]
    size: int


def chunk_numbers(
    sources: Sequence[Source],
    variable: str,
    source: npt.NDArray[np.int32],
    position: npt.NDArray[np.int32],
) -> npt.NDArray[np.int64]:
    """A number (N,) for the chunk along the run dimensions that holds each field.

    Parameters
    ----------
    source, position : (N,) int
        Of each field: position in ``sources``, and flat index in its run dimensions.
    """
    chunk = np.empty(source.size, dtype=np.int64)
    numbers, which = np.unique(source, return_inverse=True)
    alike: dict[tuple[tuple[int, ...], tuple[int, ...]], list[int]] = {}
    for place, number in enumerate(numbers):
        held = sources[number]
        alike.setdefault((held.run_shape, held.run_chunks(variable)), []).append(place)
    first = 0
    for (shape, sizes), places in alike.items():
        here = np.isin(which, places)
        counts = tuple(-(-length // size) for length, size in zip(shape, sizes, strict=True))
        inside = np.zeros(np.count_nonzero(here), dtype=np.int64)
        if shape:
            axes = np.unravel_index(position[here], shape)
            within = tuple(axis // size for axis, size in zip(axes, sizes, strict=True))
            inside = np.ravel_multi_index(within, counts).astype(np.int64)
        each = math.prod(counts)
        chunk[here] = first + which[here] * each + inside
        first += numbers.size * each
    return chunk


def straddled(
    chunk: npt.NDArray[np.int64], lead: npt.NDArray[np.int64], total: int
) -> npt.NDArray[np.bool_]:
    """Borders (total + 1,) between leads that a chunk reaches across.

    Parameters
    ----------
    chunk, lead : (N,) int
        For every field: a number for the chunk that holds it, and the position of its lead.
    total : int
        Number of leads.

    Examples
    --------
    Chunks of three leads; a second file begins at the lead after the fourth.

    >>> np.flatnonzero(~straddled(np.array([0, 0, 0, 1, 2, 2, 2]), np.arange(7), 7))
    array([0, 3, 4, 7])
    """
    _, number = np.unique(chunk, return_inverse=True)
    low = np.full(number.max(initial=-1) + 1, total, dtype=np.int64)
    high = np.full(low.size, -1, dtype=np.int64)
    np.minimum.at(low, number, lead)
    np.maximum.at(high, number, lead)
    across = np.zeros(total + 2, dtype=np.int64)
    np.add.at(across, low + 1, 1)
    np.add.at(across, high + 1, -1)
    return np.cumsum(across)[: total + 1] > 0


def grid_steps(storages: Iterable[tuple[int, ...]], shape: tuple[int, ...]) -> tuple[int, ...]:
    """Points along each dimension of the grid that hold whole chunks of all files.

    Examples
    --------
    >>> grid_steps([(16, 16), (24, 1440)], (721, 1440))
    (48, 1440)
    """
    steps = [1] * len(shape)
    for sizes in storages:
        steps = [math.lcm(step, size) for step, size in zip(steps, sizes, strict=True)]
    return tuple(min(step, length) for step, length in zip(steps, shape, strict=True))


def cut(
    borders: npt.NDArray[np.bool_],
    steps: tuple[int, ...],
    shape: tuple[int, ...],
    point: int,
    budget: int,
) -> Blocks:
    """Blocks as large as ``budget`` bytes allow, and never less than whole chunks.

    Parameters
    ----------
    borders, steps
        What cannot be divided: of `straddled` and `grid_steps`.
    point : int
        Bytes of the values of all members at one point and lead.

    Examples
    --------
    Whole fields where the budget allows one, rows of chunks where it does not.

    >>> borders = np.array([False, True, True, False, False])
    >>> cut(borders, (10, 60), (40, 60), 8, 10**6)
    Blocks(leads=((0, 4),), axes=(((0, 40),), ((0, 60),)), size=76800)
    >>> cut(borders, (10, 60), (40, 60), 8, 30_000)
    Blocks(leads=((0, 3), (3, 4)), axes=(((0, 20), (20, 40)), ((0, 60),)), size=28800)
    """
    spans = list(pairwise(int(border) for border in np.flatnonzero(~borders)))
    unit = max(stop - first for first, stop in spans)
    window = list(shape)
    for axis, step in enumerate(steps):
        rest = unit * point * math.prod(window[:axis] + window[axis + 1 :])
        if rest * window[axis] <= budget:
            break
        window[axis] = min(shape[axis], max(1, budget // (rest * step)) * step)
    here = point * math.prod(window)
    leads = _joined(spans, max(unit, budget // max(1, here)))
    axes = tuple(_pieces(length, step) for length, step in zip(shape, window, strict=True))
    return Blocks(leads, axes, here * max(stop - first for first, stop in leads))


def _joined(spans: Sequence[Span], most: int) -> tuple[Span, ...]:
    """Neighbouring spans put together while they hold at most ``most`` leads."""
    joined = [spans[0]]
    for first, stop in spans[1:]:
        if stop - joined[-1][0] <= most:
            joined[-1] = (joined[-1][0], stop)
        else:
            joined.append((first, stop))
    return tuple(joined)


def _pieces(length: int, step: int) -> tuple[Span, ...]:
    step = max(step, 1)
    return tuple((first, min(first + step, length)) for first in range(0, length, step))
