"""The engine as the commands see it."""

from __future__ import annotations

import importlib
import os
from collections import deque
from collections.abc import Callable, Iterable, Iterator, Sequence, Sized
from dataclasses import dataclass
from pathlib import Path
from types import TracebackType
from typing import Any, Protocol, TypeVar

from threadpoolctl import threadpool_limits

from ensemble_horizon.night.engine.processes import Processes
from ensemble_horizon.night.engine.sharing import install
from ensemble_horizon.runs.ahead import Mapper
from ensemble_horizon.settings.tables import EngineTable

T = TypeVar("T")
R = TypeVar("R")

_SMALL = 48 * 2**20  # bytes below which worker processes take longer to start than they save


class Hands(Protocol):
    """Workers that do tasks: processes of this machine, or those of a cluster."""

    @property
    def window(self) -> int:
        """How many tasks may be under way, those done and not yet taken included."""

    def submit(self, function: Callable[[T], R], task: T) -> Any:
        """Hand out a task."""

    def result(self, pending: Any) -> Any:
        """What a task gave, when it is done."""

    def drop(self, pending: Any) -> None:
        """Do without a task."""

    def close(self) -> None:
        """Let the workers go."""


@dataclass(frozen=True)
class Cluster:
    """A cluster, and what its workers must be able to do.

    Parameters
    ----------
    scheduler : str
        As in the settings: an address, "configured", or the path of a scheduler file.
    base : Path
        The folder that this path counts from.
    files : tuple of str
        Files that every worker must see as this process does.
    folder : Path, optional
        A folder that every worker must be able to write to.
    """

    scheduler: str
    base: Path
    files: tuple[str, ...] = ()
    folder: Path | None = None


def cluster_of(
    table: EngineTable, base: Path, paths: Sequence[str] = (), folder: Path | None = None
) -> Cluster | None:
    """The cluster that the settings name; the first and the last of the paths must be seen there.

    Returns
    -------
    Cluster, or None where the work is done on this machine.
    """
    if table.scheduler is None:
        return None
    return Cluster(table.scheduler, base, tuple(dict.fromkeys((*paths[:1], *paths[-1:]))), folder)


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


class Engine:
    """Runs a function over tasks; a context manager.

    Parameters
    ----------
    workers : int
        Processes; with one, the work is done in this process.
    common : any picklable object
        Sent to every worker once; a task function gets it from `shared`.
    cluster : Cluster, optional
        Where the work is done instead, by as many workers as are there.
    """

    def __init__(self, workers: int, common: Any = None, cluster: Cluster | None = None) -> None:
        self.workers = workers
        self._common = common
        self._cluster = cluster
        self._hands: Hands | None = None

    def __enter__(self) -> Engine:
        # One linear-algebra thread a process: matrices are small, and workers share the cores.
        self._limits = threadpool_limits(limits=1)
        self._outer = install(self._common)
        try:
            self._hands = self._call_hands()
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
        install(self._outer)
        self._limits.restore_original_limits()
        if self._hands is not None:
            self._hands.close()
            self._hands = None

    def run(self, function: Callable[[T], R], tasks: Iterable[T]) -> Iterator[tuple[int, R]]:
        """Yield ``(position of the task, result)`` in the order of the tasks.

        Tasks are drawn from an iterator only as results are taken.

        Raises
        ------
        EnsembleHorizonError
            what a task raised, or a message of its own if a worker was killed or the cluster lost.
        """
        if self._hands is None or (isinstance(tasks, Sized) and len(tasks) < 2):
            for number, task in enumerate(tasks):
                yield number, function(task)
        else:
            yield from enumerate(_in_order(self._hands, function, tasks))

    def _call_hands(self) -> Hands | None:
        if self._cluster is not None:
            # Late: nobody else needs the libraries of the cluster.
            module = importlib.import_module("ensemble_horizon.night.engine.cluster")
            hands: Hands = module.ClusterWorkers(self._cluster, self._common)
            return hands
        return Processes(self.workers, self._common) if self.workers > 1 else None


def _in_order(hands: Hands, function: Callable[[T], R], tasks: Iterable[T]) -> Iterator[R]:
    waiting = iter(tasks)
    under_way: deque[Any] = deque()

    def hand_out() -> None:
        while len(under_way) < hands.window:
            for task in waiting:
                under_way.append(hands.submit(function, task))
                break
            else:
                return

    try:
        hand_out()
        while under_way:
            result = hands.result(under_way.popleft())
            hand_out()
            yield result
    finally:
        for pending in under_way:
            hands.drop(pending)


def headers_mapper(wanted: int | None) -> Mapper | None:
    """What reads headers in worker processes, started when first needed; None with one worker."""
    workers = usable_cores() if wanted is None else wanted

    def run(function: Callable[[Any], Any], tasks: Sequence[Any]) -> Iterator[Any]:
        with Engine(min(workers, len(tasks))) as engine:
            for _, found in engine.run(function, tasks):
                yield found

    return run if workers > 1 else None
