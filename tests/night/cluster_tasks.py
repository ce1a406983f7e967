"""Tasks of the tests of the cluster, in a module that workers can import."""

import os
import threading
import time
from typing import NamedTuple

from ensemble_horizon.errors import InputError
from ensemble_horizon.night.engine import shared
from ensemble_horizon.runs.handles import HANDLES, LOCK

_count = threading.Lock()
_inside = 0
_unpacked = 0


class Pair(NamedTuple):
    """A common object that is a tuple."""

    first: int
    second: str


class Counted:
    """A common object that counts how often a process unpacked it."""

    def __reduce__(self):
        return unpack, ()


def unpack():
    global _unpacked
    _unpacked += 1
    return Counted()


def unpacked(_):
    return os.getpid(), _unpacked


def add_common(number):
    return number + shared()


def common(_):
    return shared()


def first_is_last(number):
    """Of every four tasks the first takes longest."""
    time.sleep(0.05 if number % 4 == 0 else 0)
    return number


def together(_):
    """How many tasks this process does at a time."""
    global _inside
    with _count:
        _inside += 1
        found = _inside
    time.sleep(0.02)
    with _count:
        _inside -= 1
    return found


def refuse(number):
    if number == 3:
        raise InputError("m03.nc", expected="NetCDF", found="text", remedy="remove it")
    return number


def late(_):
    raise TimeoutError("a task of its own")


def slow(number):
    time.sleep(0.3)
    return number, os.getpid()


def open_file(path):
    with LOCK:
        HANDLES.get(path)
    return os.getpid()


def open_files(_):
    with LOCK:
        return len(HANDLES._open)
