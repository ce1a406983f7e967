"""Fields of many starts kept in a file for as long as the work takes, out of memory."""

from __future__ import annotations

import os
import tempfile
from collections.abc import Iterator
from contextlib import contextmanager
from dataclasses import dataclass
from pathlib import Path

import numpy as np

from ensemble_horizon.products.writing import disk_errors

_BYTES = 4


@dataclass(frozen=True)
class Scratch:
    """A file of float32 values (field, lead, start, point).

    Written by offsets and not mapped into memory, so that its pages belong to the system and not
    to the process. Every field is written by one task only, so no two of them meet.
    """

    path: Path
    leads: int
    starts: int
    size: int

    def write(
        self, number: int, start: int, first: int, rows: np.ndarray, points: np.ndarray | None
    ) -> None:
        """Write rows (T, P) of field ``number`` from lead ``first`` on, at some points or all."""
        rows = np.ascontiguousarray(rows, dtype=np.float32)
        stretches = [np.arange(rows.shape[1])]
        begins = [0]
        if points is not None:
            cuts = np.flatnonzero(np.diff(points) != 1) + 1
            stretches = np.split(np.arange(points.size), cuts)
            begins = [int(points[stretch[0]]) for stretch in stretches]
        with disk_errors(self.path):
            handle = os.open(self.path, os.O_WRONLY)
            try:
                for row in range(rows.shape[0]):
                    for begin, stretch in zip(begins, stretches, strict=True):
                        piece = rows[row, stretch[0] : stretch[-1] + 1]
                        os.pwrite(
                            handle, piece.data, self._offset(number, first + row, start, begin)
                        )
            finally:
                os.close(handle)

    def read(self, number: int, lead: int, points: slice) -> np.ndarray:
        """Values (S, P) of all starts."""
        found = np.empty((self.starts, points.stop - points.start), dtype=np.float32)
        with disk_errors(self.path):
            handle = os.open(self.path, os.O_RDONLY)
            try:
                for start in range(self.starts):
                    offset = self._offset(number, lead, start, points.start)
                    os.preadv(handle, [found[start].data], offset)
            finally:
                os.close(handle)
        return found

    def _offset(self, number: int, lead: int, start: int, point: int) -> int:
        return (((number * self.leads + lead) * self.starts + start) * self.size + point) * _BYTES


@contextmanager
def scratch_file(
    fields: int, leads: int, starts: int, size: int, folder: Path | None = None
) -> Iterator[Scratch]:
    """A scratch file, removed at the end whatever happens.

    Parameters
    ----------
    folder : Path, optional
        Where it is made; by default in the system's temporary folder.

    Raises
    ------
    ProductError
        if there is no room for it; the variable TMPDIR names another folder.
    """
    with tempfile.TemporaryDirectory(prefix=".ensemble-horizon-", dir=folder) as own:
        path = Path(own) / "fields"
        with disk_errors(path), path.open("wb") as file:
            file.truncate(fields * leads * starts * size * _BYTES)
        yield Scratch(path, leads, starts, size)
