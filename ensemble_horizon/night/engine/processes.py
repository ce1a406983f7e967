"""Worker processes of this machine."""

from __future__ import annotations

import multiprocessing
import os
import sys
import tempfile
import threading
import warnings
from collections.abc import Callable
from concurrent.futures import Future, ProcessPoolExecutor
from concurrent.futures.process import BrokenProcessPool
from multiprocessing.process import BaseProcess
from pathlib import Path
from typing import Any, TypeVar

from threadpoolctl import threadpool_limits

from ensemble_horizon.errors import EnsembleHorizonError
from ensemble_horizon.night.engine.parcels import Parcel, pack, unpack
from ensemble_horizon.night.engine.sharing import install

T = TypeVar("T")
R = TypeVar("R")

_PRELOAD = ["ensemble_horizon.night.reading", "ensemble_horizon.horizon.map_limits"]

_folder: Path | None = None


class Processes:
    """A pool of processes that all hold the common object.

    Parameters
    ----------
    workers : int
    common : any picklable object
    """

    def __init__(self, workers: int, common: Any) -> None:
        self.window = 2 * workers
        self._folder = _parcels_folder()
        try:
            path = None if self._folder is None else Path(self._folder.name)
            self._pool = _start_pool(workers, common, path)
        except BaseException:
            self._remove_folder()
            raise

    def submit(self, function: Callable[[T], R], task: T) -> Future[Parcel]:
        """Hand out a task."""
        try:
            return self._pool.submit(_run_packed, function, task)
        except BrokenProcessPool as error:
            raise _killed() from error

    def result(self, pending: Future[Parcel]) -> Any:
        """What a task gave, when it is done."""
        try:
            return unpack(pending.result())
        except BrokenProcessPool as error:
            raise _killed() from error

    def drop(self, pending: Future[Parcel]) -> None:
        """Do without a task, where it has not begun."""
        pending.cancel()

    def close(self) -> None:
        """Wait for the tasks that have begun, and end the processes."""
        self._pool.shutdown(wait=True, cancel_futures=True)
        self._remove_folder()

    def _remove_folder(self) -> None:
        if self._folder is not None:
            self._folder.cleanup()


def _killed() -> EnsembleHorizonError:
    return EnsembleHorizonError(
        "a worker process",
        expected="it to finish its task",
        found="that it was killed, most often for want of memory",
        remedy="lower engine.block_memory_mib or engine.workers and run again",
    )


def _start_worker(common: Any, folder: Path | None) -> None:
    global _folder
    parent = multiprocessing.parent_process()
    if parent is not None:
        threading.Thread(target=_end_with, args=(parent,), daemon=True).start()
    threadpool_limits(limits=1)
    install(common)
    _folder = folder


def _end_with(parent: BaseProcess) -> None:
    """A worker whose parent was killed would wait for its next task for ever."""
    parent.join()
    os._exit(1)


def _run_packed(function: Callable[[T], R], task: T) -> Parcel:
    return pack(function(task), _folder)


def _parcels_folder() -> tempfile.TemporaryDirectory[str] | None:
    """Where results lie on their way; None where nothing can be written: they take the pipe."""
    try:
        return tempfile.TemporaryDirectory(prefix="ensemble-horizon-", ignore_cleanup_errors=True)
    except OSError:
        return None


def _start_pool(workers: int, common: Any, folder: Path | None) -> ProcessPoolExecutor:
    context = multiprocessing.get_context(_start_method())
    if context.get_start_method() == "forkserver":
        context.set_forkserver_preload(_PRELOAD)
    pool = ProcessPoolExecutor(
        workers, mp_context=context, initializer=_start_worker, initargs=(common, folder)
    )
    with warnings.catch_warnings():
        # Python cannot tell idle threads of the linear-algebra library from threads that hold
        # locks; its own threads have been ruled out by the choice of the start method.
        warnings.simplefilter("ignore", DeprecationWarning)
        pool.submit(os.getpid)  # starts the workers now, before there are other threads
    return pool


def _start_method() -> str:
    """Copies of this process where that is safe, as they need not load anything anew."""
    methods = multiprocessing.get_all_start_methods()
    if "fork" in methods and sys.platform == "linux" and threading.active_count() == 1:
        return "fork"
    return "forkserver" if "forkserver" in methods else "spawn"
