"""Open files: one bounded cache per process, one lock, and the border for foreign errors."""

from __future__ import annotations

import contextlib
import os
import string
from collections import OrderedDict
from collections.abc import Iterator
from dataclasses import dataclass, field
from pathlib import Path

import netCDF4
import numpy as np
from xarray.backends.locks import HDF5_LOCK, NETCDFC_LOCK, combine_locks

from ensemble_horizon.errors import InputError
from ensemble_horizon.runs.classic import classic_shortfall
from ensemble_horizon.runs.decoding import Decoder

CAPACITY = 128

# The netCDF and HDF5 libraries are not safe in threads. xarray guards them with these same locks,
# so files opened through xarray and through this module may be read side by side.
LOCK = combine_locks([NETCDFC_LOCK, HDF5_LOCK])

_KEPT = 16 * 2**20

_SIGNATURES = {
    b"GRIB": "a GRIB file",
    b"\x1f\x8b": "a gzip-compressed file",
    b"BZh": "a bzip2-compressed file",
    b"\xfd7zXZ": "an xz-compressed file",
    b"PK\x03\x04": "a zip archive",
}
_HDF5 = b"\x89HDF\r\n\x1a\n"
_CLASSIC = (b"CDF\x01", b"CDF\x02", b"CDF\x05")


@dataclass(frozen=True)
class Opened:
    """An open file, and the decoders of the variables that were read from it."""

    stamp: tuple[int, ...]
    dataset: netCDF4.Dataset
    decoders: dict[str, Decoder] = field(default_factory=dict)


class Handles:
    """Least-recently-used cache of open datasets; a forked child starts with an empty one."""

    def __init__(self, capacity: int = CAPACITY) -> None:
        self.capacity = capacity
        self._pid = os.getpid()
        self._open: OrderedDict[str, Opened] = OrderedDict()
        self._inherited: list[object] = []
        self.opened = 0

    def get(self, path: str) -> Opened:
        """The open file at ``path``; call it and use the result under `LOCK` only."""
        if self._pid != os.getpid():
            # Closing a parent's handle in the child could touch state that both share.
            self._inherited.append(self._open)
            self._open, self._pid = OrderedDict(), os.getpid()
        stamp = stamp_of(path)
        known = self._open.get(path)
        if known is not None and known.stamp == stamp:
            self._open.move_to_end(path)
            return known
        if known is not None:
            self._open.pop(path).dataset.close()
        while len(self._open) >= self.capacity:
            self._open.popitem(last=False)[1].dataset.close()
        self._open[path] = Opened(stamp, open_raw(path))
        self.opened += 1
        return self._open[path]

    def clear(self) -> None:
        """Close every file of this process."""
        if self._pid == os.getpid():
            for opened in self._open.values():
                opened.dataset.close()
        self._open.clear()


HANDLES = Handles()


def _keep_buffers() -> None:
    """Let the C library keep freed memory that the NetCDF library wants again at every file.

    To tell what a file is, that one fills two buffers of 4 MB. Taken from the system and given back
    each time, they cost three times as much as all else in opening a file. The C library keeps up
    to twice the largest block that was freed so far: one whose pages were never touched will do.
    """
    np.empty(_KEPT, dtype=np.uint8)


_keep_buffers()


def close_files() -> None:
    """Close the files that this process keeps open between reads.

    Examples
    --------
    >>> close_files()
    """
    with LOCK:
        HANDLES.clear()


def open_raw(path: str) -> netCDF4.Dataset:
    """Open a NetCDF file so that values come as they are stored.

    Raises
    ------
    InputError
        If the path is missing, a directory, not NetCDF, or cut short.
    """
    try:
        dataset = netCDF4.Dataset(path, "r")
    except (OSError, RuntimeError) as error:
        raise diagnose(path, error) from error
    missing = classic_shortfall(path)
    if missing:
        dataset.close()
        raise _truncated(path, f"a file cut short by {missing} bytes")
    dataset.set_auto_maskandscale(False)
    return dataset


def stamp_of(path: str) -> tuple[int, ...]:
    """By what another file of the same name shows, also one that kept size and time of the old.

    Raises
    ------
    InputError
        If there is no file any more.
    """
    try:
        status = os.stat(path)  # noqa: PTH116 (on the path of every read, and a string is at hand)
    except OSError as error:
        raise diagnose(path, error) from error
    return status.st_mtime_ns, status.st_size, status.st_ino, status.st_ctime_ns


@contextlib.contextmanager
def border(path: str, what: str) -> Iterator[None]:
    """Turn errors of the NetCDF library inside the block into `InputError`."""
    try:
        yield
    except (OSError, RuntimeError) as error:
        raise InputError(
            path,
            expected=f"to read {what}",
            found=f"a read error ({_first_line(error)})",
            remedy="the file is damaged or was replaced while it was read; transfer it again",
        ) from error


def diagnose(path: str, error: BaseException) -> InputError:
    """Say what ``path`` is, when it could not be opened as NetCDF."""
    place = Path(path)
    if not place.exists():
        return InputError(
            path,
            expected="a NetCDF file",
            found="no such file",
            remedy="check the path, or wait until the run has written it",
        )
    if place.is_dir():
        return InputError(
            path,
            expected="a NetCDF file",
            found="a directory",
            remedy=f"name the files in it, for instance {path.rstrip('/')}/*.nc",
        )
    try:
        with place.open("rb") as stream:
            head = stream.read(512)
    except OSError as trouble:
        return InputError(
            path,
            expected="a NetCDF file that can be read",
            found=f"{trouble.strerror or trouble}",
            remedy="check the permissions of the file",
        )
    if head.startswith(_HDF5) or head[:4] in _CLASSIC:
        return _truncated(path, f"a truncated or damaged file ({_first_line(error)})")
    return InputError(
        path,
        expected="a NetCDF file",
        found=_kind_of(head),
        remedy="convert the file to NetCDF, or leave it out",
    )


def _truncated(path: str, found: str) -> InputError:
    return InputError(
        path,
        expected="a complete NetCDF file",
        found=found,
        remedy="transfer the file again, or leave it out",
    )


def _kind_of(head: bytes) -> str:
    if not head:
        return "an empty file"
    for signature, name in _SIGNATURES.items():
        if head.startswith(signature):
            return name
    printable = set(string.printable.encode())
    if all(byte in printable for byte in head):
        return "a text file"
    return "a file of another format"


def _first_line(error: BaseException) -> str:
    lines = str(error).strip().splitlines()
    return lines[0].rstrip(".") if lines else type(error).__name__
