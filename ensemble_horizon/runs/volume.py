"""How much there is to read of a variable: files, fields, chunks, bytes; no data are read."""

from __future__ import annotations

import math
from dataclasses import dataclass
from pathlib import Path

import numpy as np

from ensemble_horizon.runs.catalogue import Catalogue
from ensemble_horizon.runs.decoding import StoredVariable
from ensemble_horizon.runs.handles import LOCK, border, open_raw
from ensemble_horizon.runs.sources import Source


@dataclass(frozen=True)
class Volume:
    """What the fields of one variable come to.

    Parameters
    ----------
    files, fields : int
        Files that hold the variable, and its fields: one for each start, lead and member.
    values : int
        Bytes of the values as they are stored, before compression.
    chunks, reads : int
        Chunks that hold them, and how often one is read when starts are read one by one: more
        often where a chunk holds several starts. Zero where values are stored without chunks.
    unpacked : int
        Bytes that come out of the chunks read: more than ``values`` where a chunk also holds
        what is not wanted, such as other levels or other starts.
    stored : int
        Bytes on disk, about: the files, of which a variable has the share that its values have.
    """

    files: int
    fields: int
    values: int
    chunks: int
    reads: int
    unpacked: int
    stored: int


def volume_of(catalogue: Catalogue, variable: str) -> Volume:
    """What there is to read of one variable of a catalogue.

    Sizes on disk are asked of the file system, and one file is opened for the share that the
    variable has of it.

    Raises
    ------
    InputError
        If that file cannot be opened.
    """
    starts, _, chunk = catalogue.chunks(variable)
    table = catalogue.tables[catalogue.table_of[variable]]
    number = table.source[table.source >= 0]
    itemsize = catalogue.variables[variable].dtype.itemsize
    size = math.prod(catalogue.grid.shape)
    numbers, which = np.unique(number, return_inverse=True)
    sources = [catalogue.sources[int(item)] for item in numbers]
    shapes = [_chunks_of_grid(source, variable, catalogue.grid.shape) for source in sources]
    per_source = np.array(shapes, dtype=np.int64).reshape(-1, 2)[which]
    _, first = np.unique(chunk, return_index=True)
    _, read = np.unique(np.stack([starts, chunk]), axis=1, return_index=True)
    files = list(dict.fromkeys(source.path for source in sources))
    unpacked = int(per_source[read].prod(axis=1).sum()) * itemsize
    chunked = np.array([source.storage[variable].chunked for source in sources], dtype=bool)[which]
    if not chunked.any():
        unpacked = number.size * size * itemsize
    here = int(per_source[first].prod(axis=1).sum()) * itemsize
    on_disk = sum(Path(path).stat().st_size for path in files)
    whole = _bytes_of_values(files[0]) * len(files)
    return Volume(
        files=len(files),
        fields=int(number.size),
        values=int(number.size) * size * itemsize,
        chunks=int((per_source[first, 0] * chunked[first]).sum()),
        reads=int((per_source[read, 0] * chunked[read]).sum()),
        unpacked=unpacked,
        stored=round(on_disk * min(1.0, here / max(1, whole))),
    )


def _chunks_of_grid(source: Source, variable: str, shape: tuple[int, ...]) -> tuple[int, int]:
    """Number of chunks side by side that cover the grid, and values in each of them."""
    steps = source.grid_chunks(variable)
    count = math.prod(-(-length // step) for length, step in zip(shape, steps, strict=True))
    return count, math.prod(source.storage[variable].shape)


def _bytes_of_values(path: str) -> int:
    """Bytes of all that a file holds, before compression."""
    with LOCK:
        dataset = open_raw(path)
        try:
            with border(path, "the header"):
                return sum(_bytes(variable) for variable in dataset.variables.values())
        finally:
            dataset.close()


def _bytes(variable: StoredVariable) -> int:
    itemsize = variable.dtype.itemsize if isinstance(variable.dtype, np.dtype) else 1
    return math.prod(variable.shape) * itemsize
