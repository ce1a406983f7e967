"""How long a classic NetCDF file must be.

The library reads past the end of a classic file (CDF-1, CDF-2, CDF-5) without complaint and hands
out whatever was in memory, so the length that the header promises is checked here. Layout: NetCDF
classic format specification, "The NetCDF Classic Format Specification" (Unidata).
"""

from __future__ import annotations

import struct
from pathlib import Path
from typing import BinaryIO

_TYPE_SIZES = {1: 1, 2: 1, 3: 2, 4: 4, 5: 4, 6: 8, 7: 1, 8: 2, 9: 4, 10: 8, 11: 8}


class _Header:
    """Reads the header; counts are 8 bytes wide in CDF-5, offsets in CDF-2 and CDF-5."""

    def __init__(self, stream: BinaryIO, version: int) -> None:
        self.stream = stream
        self.count_format = ">q" if version == 5 else ">i"
        self.offset_format = ">i" if version == 1 else ">q"

    def take(self, form: str) -> int:
        data = self.stream.read(struct.calcsize(form))
        return int(struct.unpack(form, data)[0])

    def count(self) -> int:
        return self.take(self.count_format)

    def skip(self, size: int) -> None:
        self.stream.seek(size + (-size) % 4, 1)

    def name(self) -> None:
        self.skip(self.count())

    def attributes(self) -> None:
        self.take(">i")
        for _ in range(self.count()):
            self.name()
            size = _TYPE_SIZES[self.take(">i")]
            self.skip(size * self.count())

    def dimensions(self) -> list[int]:
        self.take(">i")
        lengths = []
        for _ in range(self.count()):
            self.name()
            lengths.append(self.count())
        return lengths


def classic_shortfall(path: str) -> int:
    """Bytes that a classic NetCDF file lacks; 0 for a complete one or another format."""
    try:
        with Path(path).open("rb") as stream:
            magic = stream.read(4)
            if magic[:3] != b"CDF" or magic[3] not in (1, 2, 5):
                return 0
            needed = _needed(_Header(stream, magic[3]))
            size = stream.seek(0, 2)
    except (OSError, struct.error, KeyError, IndexError):
        return 0
    return max(0, needed - size)


def _needed(header: _Header) -> int:
    records = header.count()
    lengths = header.dimensions()
    header.attributes()
    header.take(">i")
    end, first_record, record_sizes = 0, None, []
    for _ in range(header.count()):
        header.name()
        shape = [lengths[header.count()] for _ in range(header.count())]
        header.attributes()
        size = _TYPE_SIZES[header.take(">i")]
        header.count()
        begin = header.take(header.offset_format)
        is_record = bool(shape) and shape[0] == 0
        for length in shape[1:] if is_record else shape:
            size *= length
        if is_record:
            first_record = begin if first_record is None else min(first_record, begin)
            record_sizes.append(size)
        else:
            end = max(end, begin + size)
    if first_record is None or records <= 0:
        return end
    # A single record variable is not padded to four bytes between records.
    padded = [size + (-size) % 4 for size in record_sizes]
    per_record = record_sizes[0] if len(record_sizes) == 1 else sum(padded)
    last = record_sizes[0] if len(record_sizes) == 1 else sum(padded[:-1]) + record_sizes[-1]
    return max(end, first_record + (records - 1) * per_record + last)
