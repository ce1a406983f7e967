"""Results on their way between processes, their large arrays left in a file.

Through a pipe, fields of 30 MB cost both processes three times as much work as through a file that
is removed at once, and one of the two is wanted by all the others.
"""

from __future__ import annotations

import os
import pickle
from dataclasses import dataclass
from itertools import count
from pathlib import Path
from typing import Any

import numpy as np

_LARGE = 2**18  # bytes of an array below which a file takes longer than it saves

_numbers = count()


@dataclass(frozen=True)
class Parcel:
    """A result without its large arrays; their bytes lie one after another in the file."""

    body: bytes
    sizes: tuple[int, ...] = ()
    path: Path | None = None


def pack(result: Any, folder: Path | None) -> Parcel:
    """Put the large arrays of a result into a file in ``folder``, where there is room for them."""
    large: list[memoryview] = []

    def small(buffer: pickle.PickleBuffer) -> bool:
        raw = buffer.raw()
        if raw.nbytes >= _LARGE:
            large.append(raw)
        return raw.nbytes < _LARGE

    if folder is not None:
        body = pickle.dumps(result, protocol=5, buffer_callback=small)
        if not large:
            return Parcel(body)
        path = folder / f"{os.getpid()}-{next(_numbers)}"
        try:
            with path.open("xb") as stream:
                for raw in large:
                    stream.write(raw)
            return Parcel(body, tuple(raw.nbytes for raw in large), path)
        except OSError:
            path.unlink(missing_ok=True)
    return Parcel(pickle.dumps(result, protocol=5))


def unpack(parcel: Parcel) -> Any:
    """The result; its file is removed."""
    if parcel.path is None:
        return pickle.loads(parcel.body)
    arrays = [np.empty(size, dtype=np.uint8) for size in parcel.sizes]
    with parcel.path.open("rb", buffering=0) as stream:
        for array in arrays:
            _fill(stream, array.data, parcel.path)
    parcel.path.unlink()
    return pickle.loads(parcel.body, buffers=arrays)


def _fill(stream: Any, wanted: memoryview, path: Path) -> None:
    while wanted.nbytes:
        got = stream.readinto(wanted)
        if not got:
            raise OSError(f"{path} was cut short")
        wanted = wanted[got:]
