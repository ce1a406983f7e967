"""One run at a time in a folder: a lock that ends with the process that holds it."""

from __future__ import annotations

import contextlib
import errno
import fcntl
import json
import logging
import os
import socket
from collections.abc import Iterator
from pathlib import Path
from typing import Literal

from ensemble_horizon.errors import ProductError
from ensemble_horizon.products.writing import disk_errors

LOCK_FILE = ".nightly.lock"

IfBusy = Literal["wait", "leave"]

_HELD = (errno.EAGAIN, errno.EACCES)
_NO_LOCKS = (errno.ENOLCK, errno.ENOTSUP, errno.EOPNOTSUPP, errno.EINVAL, errno.ENOSYS)

log = logging.getLogger(__name__)

_ours: set[int] = set()


@contextlib.contextmanager
def locked(folder: Path, if_busy: IfBusy, since: str) -> Iterator[None]:
    """Hold the lock of ``folder`` for the block.

    The lock belongs to the open file and not to its name, so that a run that was killed holds none.

    Parameters
    ----------
    folder : Path
        Made if need be.
    if_busy : "wait" or "leave"
        What to do while another process holds it.
    since : str
        Time of the beginning of this run, for those that find it busy.

    Raises
    ------
    ProductError
        if the folder is busy and ``if_busy`` is "leave", cannot be written, or keeps no locks.

    Examples
    --------
    >>> import tempfile
    >>> with locked(Path(tempfile.mkdtemp()), "leave", "2031-02-14T06:00:00Z"):
    ...     pass
    """
    place = folder / LOCK_FILE
    with disk_errors(place):
        folder.mkdir(parents=True, exist_ok=True)
        descriptor = os.open(place, os.O_RDWR | os.O_CREAT | os.O_CLOEXEC, 0o644)
    _ours.add(descriptor)
    try:
        _take(descriptor, folder, if_busy)
        with disk_errors(place):
            holder = {"pid": os.getpid(), "host": socket.gethostname(), "since": since}
            _write(descriptor, json.dumps(holder))
        yield
        with contextlib.suppress(OSError):
            _write(descriptor, "")
    finally:
        _ours.discard(descriptor)
        os.close(descriptor)


def _take(descriptor: int, folder: Path, if_busy: IfBusy) -> None:
    try:
        fcntl.flock(descriptor, fcntl.LOCK_EX | fcntl.LOCK_NB)
    except OSError as error:
        if error.errno in _NO_LOCKS:
            raise ProductError(
                str(folder),
                expected="a file system that keeps locks, so that two runs cannot meet",
                found=f"one that keeps none ({error.strerror})",
                remedy="name a folder on a local disk",
            ) from error
        if error.errno not in _HELD:
            raise
        holder = _holder(descriptor)
        if if_busy == "leave":
            raise ProductError(
                str(folder),
                expected="no other run at work there",
                found=holder,
                remedy="let it finish, or give --if-busy wait",
            ) from error
        log.info("waiting for %s in %s", holder, folder)
        fcntl.flock(descriptor, fcntl.LOCK_EX)


def _holder(descriptor: int) -> str:
    """Who holds the lock, in words."""
    with contextlib.suppress(OSError, ValueError, KeyError, TypeError):
        found = json.loads(os.pread(descriptor, 4096, 0))
        return f"process {found['pid']} on {found['host']}, at work since {found['since']}"
    return "another run at work"


def _write(descriptor: int, text: str) -> None:
    os.ftruncate(descriptor, 0)
    os.pwrite(descriptor, text.encode(), 0)


def _let_go() -> None:
    """In a worker process: it shares the open file, and would hold the lock beyond our end."""
    for descriptor in _ours:
        with contextlib.suppress(OSError):
            os.close(descriptor)
    _ours.clear()


os.register_at_fork(after_in_child=_let_go)
