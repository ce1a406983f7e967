"""Where the work is done: in this process, or in worker processes on this machine.

Results come back one by one, as they are ready, and only a few tasks are under way at a time, so
that memory stays flat however many tasks there are. Workers are processes because the NetCDF
library lets one thread in at a time.
"""

from __future__ import annotations

import multiprocessing
import os
import sys
import tempfile
import threading
import warnings
from collections.abc import Callable, Iterable, Iterator, Sequence, Sized
from concurrent.futures import FIRST_COMPLETED, Future, ProcessPoolExecutor, wait
from concurrent.futures.process import BrokenProcessPool
from multiprocessing.process import BaseProcess
from pathlib import Path
from types import TracebackType
from typing import Any, TypeVar

from threadpoolctl import threadpool_limits

from ensemble_horizon.errors import EnsembleHorizonError
from ensemble_horizon.night.parcels import Parcel, pack, unpack
from ensemble_horizon.runs.ahead import Mapper

T = TypeVar("T")
R = TypeVar("R")

_PRELOAD = ["ensemble_horizon.night.reading", "ensemble_horizon.horizon.map_limits"]

_SMALL = 48 * 2**20  # bytes below which worker processes take longer to start than they save

_shared: Any = None
_folder: Path | None = None


def usable_cores() -> int:
    """Cores that this process may use."""
    if hasattr(os, "sched_getaffinity"):
        return len(os.sched_getaffinity(0))
    return os.cpu_count() or 1


def workers_for(wanted: int | None, size: int) -> int:
    """Workers for ``size`` bytes of values: as many as wanted, or as are worth their start."""
    if wanted is not None:
        return wanted
    return 1 if size < _SMALL else usable_cores()


def shared() -> Any:
    """What the engine was given for all its tasks."""
    return _shared


class Engine:
    """Runs a function over tasks; a context manager.

    Parameters
    ----------
    workers : int
        Processes; with one, the work is done in this process.
    common : any picklable object
        Sent to every worker once; a task function gets it from `shared`.
    """

    def __init__(self, workers: int, common: Any = None) -> None:
        self.workers = workers
        self._common = common
        self._pool: ProcessPoolExecutor | None = None
        self._folder: tempfile.TemporaryDirectory[str] | None = None

    def __enter__(self) -> Engine:
        # One linear-algebra thread a process: matrices are small, and workers share the cores.
        self._limits = threadpool_limits(limits=1)
        self._outer = _shared
        _install(self._common)
        if self.workers > 1:
            try:
                self._folder = _parcels_folder()
                path = None if self._folder is None else Path(self._folder.name)
                self._pool = _start_pool(self.workers, self._common, path)
            except BaseException:
                self.__exit__(None, None, None)
                raise
        return self

    def __exit__(
        self,
        kind: type[BaseException] | None,
        error: BaseException | None,
        trace: TracebackType | None,
    ) -> None:
        _install(self._outer)
        self._limits.restore_original_limits()
        if self._pool is not None:
            self._pool.shutdown(wait=True, cancel_futures=True)
            self._pool = None
        if self._folder is not None:
            self._folder.cleanup()
            self._folder = None

    def run(self, function: Callable[[T], R], tasks: Iterable[T]) -> Iterator[tuple[int, R]]:
        """Yield ``(position of the task, result)`` as results come in.

        Tasks are drawn from an iterator only as workers become free.

        Raises
        ------
        EnsembleHorizonError
            what a task raised, or a message of its own if a worker was killed.
        """
        if self._pool is None or (isinstance(tasks, Sized) and len(tasks) < 2):
            for number, task in enumerate(tasks):
                yield number, function(task)
            return
        try:
            yield from self._run_in_pool(self._pool, function, tasks)
        except BrokenProcessPool as error:
            raise EnsembleHorizonError(
                "a worker process",
                expected="it to finish its task",
                found="that it was killed, most often for want of memory",
                remedy="lower engine.block_memory_mib or engine.workers and run again",
            ) from error

    def run_in_order(self, function: Callable[[T], R], tasks: Iterable[T]) -> Iterator[R]:
        """Yield the results in the order of the tasks; otherwise as `run`."""
        early: dict[int, R] = {}
        wanted = 0
        for number, result in self.run(function, tasks):
            early[number] = result
            while wanted in early:
                yield early.pop(wanted)
                wanted += 1

    def _run_in_pool(
        self, pool: ProcessPoolExecutor, function: Callable[[T], R], tasks: Iterable[T]
    ) -> Iterator[tuple[int, R]]:
        waiting = iter(enumerate(tasks))
        under_way: dict[Future[Parcel], int] = {}

        def submit_next() -> None:
            for number, task in waiting:
                under_way[pool.submit(_run_packed, function, task)] = number
                return

        for _ in range(2 * self.workers):
            submit_next()
        while under_way:
            done, _ = wait(under_way, return_when=FIRST_COMPLETED)
            for future in done:
                number = under_way.pop(future)
                submit_next()
                yield number, unpack(future.result())


def headers_mapper(wanted: int | None) -> Mapper | None:
    """What reads headers in worker processes, started when first needed; None with one worker."""
    workers = usable_cores() if wanted is None else wanted

    def run(function: Callable[[Any], Any], tasks: Sequence[Any]) -> Iterator[Any]:
        with Engine(min(workers, len(tasks))) as engine:
            yield from engine.run_in_order(function, tasks)

    return run if workers > 1 else None


def _install(common: Any) -> None:
    global _shared
    _shared = common


def _start_worker(common: Any, folder: Path | None) -> None:
    global _folder
    parent = multiprocessing.parent_process()
    if parent is not None:
        threading.Thread(target=_end_with, args=(parent,), daemon=True).start()
    threadpool_limits(limits=1)
    _install(common)
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
