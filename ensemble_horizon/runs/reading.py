"""Reading the values of one source, in as few calls as its layout allows."""

from __future__ import annotations

import math
from collections.abc import Iterator
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from ensemble_horizon.errors import InputError
from ensemble_horizon.runs.decoding import Decoder, decoder
from ensemble_horizon.runs.handles import HANDLES, LOCK, Opened, border
from ensemble_horizon.runs.headers import VariableHeader
from ensemble_horizon.runs.sources import Source

Bounds = tuple[tuple[int, int], ...]
Indices = npt.NDArray[np.int64]

# Reading a span with gaps is cheaper than many calls while at least this part of it is wanted.
_DENSE = 0.5
_CHUNK_CACHE = 2 * 2**20
_CALL_VALUES = 2**23  # of one call: what was read and what is decoded of it are held at once


@dataclass(frozen=True)
class RawBlock:
    """Stored numbers of some fields: raw (..., *window), and the place of each field in the output.

    ``member`` and ``lead`` have the leading shape of ``raw``.
    """

    raw: np.ndarray
    member: Indices
    lead: Indices
    decoder: Decoder


def value_type(header: VariableHeader) -> np.dtype:
    """The type of the decoded values of a variable."""
    return decoder(header.dtype, header.attrs).dtype


def read_source(
    source: Source,
    variable: str,
    where: npt.NDArray[np.bool_],
    position: npt.NDArray[np.int32],
    bounds: Bounds,
    out: np.ndarray,
) -> None:
    """Read the fields that ``source`` holds into ``out``.

    Parameters
    ----------
    where : bool ndarray (member, lead)
        Which fields of ``out`` come from this source.
    position : int ndarray (member, lead)
        Flat index of each field in the source's run dimensions.
    bounds : pairs of first and last + 1
        The window, per spatial dimension.
    out : float ndarray (member, lead, *window)
        Where the decoded values go.
    """
    space = out.ndim - 2
    for block in raw_blocks(source, variable, where, position, bounds):
        place = _view(out, block)
        if place is not None:
            target, raw = place
            block.decoder.decode(raw, target)
        else:
            values = np.empty(block.raw.shape, dtype=out.dtype)
            block.decoder.decode(block.raw, values)
            fields = values.reshape(-1, *values.shape[values.ndim - space :])
            out[block.member.ravel(), block.lead.ravel()] = fields


def raw_blocks(
    source: Source,
    variable: str,
    where: npt.NDArray[np.bool_],
    position: npt.NDArray[np.int32],
    bounds: Bounds,
) -> Iterator[RawBlock]:
    """Read the wanted fields of ``source`` as stored, adjacent ones in one call.

    Calls take in whole chunks along the run dimensions, so that none is decompressed twice.
    """
    member, lead = np.nonzero(where)
    if member.size == 0:
        return
    if source.run_shape:
        axes = np.stack(np.unravel_index(position[where], source.run_shape))
    else:
        axes = np.zeros((0, member.size), dtype=np.int64)
    sizes = np.array(source.run_chunks(variable), dtype=np.int64)[:, np.newaxis]
    fields = math.prod(stop - first for first, stop in bounds)
    for chosen in _calls(axes, sizes, max(1, _CALL_VALUES // max(1, fields))):
        along = [np.unique(axis[chosen]) for axis in axes]
        raw, decode = _read_slab(source, variable, along, bounds)
        shape = tuple(part.size for part in along)
        # The slab holds its fields in the order of the axes, so the labels are sorted likewise.
        order = chosen[np.lexsort(axes[::-1, chosen])] if along else chosen
        if math.prod(shape) == chosen.size:
            yield RawBlock(raw, member[order].reshape(shape), lead[order].reshape(shape), decode)
        else:
            places = zip(along, axes[:, order], strict=True)
            picked = tuple(np.searchsorted(part, axis) for part, axis in places)
            yield RawBlock(raw[picked], member[order], lead[order], decode)


def _calls(axes: Indices, sizes: Indices, most: int) -> Iterator[Indices]:
    """Split the fields into calls of about ``most`` fields, with no chunk in two of them."""
    cells, cell = axes // sizes, np.arange(axes.shape[1])
    if (sizes > 1).any():
        cells, cell = np.unique(cells, axis=1, return_inverse=True)
        cell = cell.ravel()
    count = cells.shape[1]
    whole = [np.unique(axis) for axis in cells]
    one = all(part[-1] - part[0] + 1 == part.size for part in whole)
    one = one and math.prod(part.size for part in whole) == count
    portion = max(1, most * count // cell.size)
    for slab in (np.arange(count),) if one else _slabs(cells, np.arange(count)):
        for part in _portions(cells, slab, portion):
            here = slice(None) if part.size == count else np.isin(cell, part)
            yield np.arange(cell.size)[here]


def _portions(cells: Indices, slab: Indices, most: int) -> Iterator[Indices]:
    """Cut a slab along its first axis that is longer than one, so that calls stay small."""
    for axis in cells[:, slab]:
        along = np.unique(axis)
        if along.size > 1 and slab.size > most:
            step = max(1, most * along.size // slab.size)
            for first in range(0, along.size, step):
                yield slab[np.isin(axis, along[first : first + step])]
            return
    yield slab


def _slabs(cells: Indices, chosen: Indices, axis: int = 0) -> Iterator[Indices]:
    """Split the cells into sets that are full products of dense positions along every axis."""
    if axis == len(cells):
        yield chosen
        return
    positions = np.unique(cells[axis, chosen])
    for run in _dense_runs(positions):
        part = chosen[np.isin(cells[axis, chosen], run)]
        rest = [np.unique(cells[later, part]).size for later in range(axis + 1, len(cells))]
        if run.size * math.prod(rest) == part.size:
            yield from _slabs(cells, part, axis + 1)
        else:
            for single in run:
                yield from _slabs(cells, part[cells[axis, part] == single], axis + 1)


def _dense_runs(positions: Indices) -> list[Indices]:
    span = int(positions[-1] - positions[0]) + 1
    if positions.size >= _DENSE * span:
        return [positions]
    return np.split(positions, np.flatnonzero(np.diff(positions) > 1) + 1)


def _read_slab(
    source: Source, variable: str, along: list[Indices], bounds: Bounds
) -> tuple[np.ndarray, Decoder]:
    rank = len(source.run_axes) + len(source.space_axes) + len(source.fixed)
    key: list[slice] = [slice(None)] * rank
    for axis, index in source.fixed:
        key[axis] = slice(index, index + 1)
    for axis, positions in zip(source.run_axes, along, strict=True):
        key[axis] = slice(int(positions[0]), int(positions[-1]) + 1)
    for axis, (first, stop) in zip(source.space_axes, bounds, strict=True):
        key[axis] = slice(first, stop)
    with LOCK:
        opened = HANDLES.get(source.path)
        values = _variable(opened, source.path, variable, rank)
        with border(source.path, f"{variable!r}"):
            raw = np.asarray(opened.dataset.variables[variable][tuple(key)])
    ordered = (*source.run_axes, *source.space_axes, *(axis for axis, _ in source.fixed))
    raw = raw.transpose(ordered)
    raw = raw.reshape(raw.shape[: rank - len(source.fixed)])
    for axis, positions in enumerate(along):
        if positions.size < raw.shape[axis]:
            raw = raw.take(positions - positions[0], axis=axis)
    return raw, values


def _variable(opened: Opened, path: str, variable: str, rank: int) -> Decoder:
    """The decoder of a variable, made once per open file."""
    known = opened.decoders.get(variable)
    if known is not None:
        return known
    stored = opened.dataset.variables.get(variable)
    if stored is None or stored.ndim != rank:
        raise InputError(
            path,
            expected=f"{variable!r} as it was when the files were catalogued",
            found="another layout",
            remedy="the file was replaced meanwhile; start again",
        )
    # Blocks follow the chunks, so a chunk is wanted once: what the library kept of it, up to 64 MB
    # for each variable of each open file, would only fill the memory. A small variable, such as the
    # analyses of a region, may be read moment by moment.
    if stored.chunking() not in (None, "contiguous"):
        small = math.prod(stored.shape) * stored.dtype.itemsize <= _CHUNK_CACHE
        stored.set_var_chunk_cache(_CHUNK_CACHE if small else 0)
    made = decoder(stored.dtype, {key: stored.getncattr(key) for key in stored.ncattrs()})
    opened.decoders[variable] = made
    return made


def _view(out: np.ndarray, block: RawBlock) -> tuple[np.ndarray, np.ndarray] | None:
    """A view of ``out`` and ``raw`` in the same order, where the block fills a rectangle of it."""
    axes = block.member.ndim
    if block.member.size == 1:
        member, lead = block.member.item(), block.lead.item()
        target = out[member : member + 1, lead : lead + 1]
        return target, block.raw.reshape(target.shape)
    moving = [axis for axis in range(axes) if block.member.shape[axis] > 1]
    by_member = [axis for axis in moving if (np.diff(block.member, axis=axis) != 0).any()]
    by_lead = [axis for axis in moving if (np.diff(block.lead, axis=axis) != 0).any()]
    if len(by_member) > 1 or len(by_lead) > 1 or set(by_member) & set(by_lead):
        return None
    members = np.unique(block.member)
    leads = np.unique(block.lead)
    for index, axis, along in ((block.member, by_member, members), (block.lead, by_lead, leads)):
        if along[-1] - along[0] + 1 != along.size:
            return None
        if axis and not (np.diff(index, axis=axis[0]) == 1).all():
            return None
    order = [*by_member, *by_lead]
    rest = [axis for axis in range(axes) if axis not in order]
    raw = block.raw.transpose((*order, *rest, *range(axes, block.raw.ndim)))
    raw = raw.reshape(members.size, leads.size, *block.raw.shape[axes:])
    return out[members[0] : members[-1] + 1, leads[0] : leads[-1] + 1], raw
