"""The workers of a cluster of dask.distributed.

What all tasks have in common is sent to every worker once. A task is a few positions, its result
a few fields: nothing of the size of the ensemble crosses the network.
"""

from __future__ import annotations

import json
import logging
import pickle
from collections.abc import Callable, Iterator
from concurrent.futures import CancelledError
from contextlib import contextmanager, suppress
from dataclasses import dataclass
from pathlib import Path
from time import monotonic, sleep
from typing import Any, TypeVar

import dask
import distributed
from dask.utils import parse_timedelta
from distributed import KilledWorker
from distributed.comm.core import CommClosedError

from ensemble_horizon.errors import EnsembleHorizonError, SettingsError
from ensemble_horizon.night.engine.front import Cluster
from ensemble_horizon.night.engine.probe import require_fit
from ensemble_horizon.night.engine.remote import perform
from ensemble_horizon.runs.handles import close_files

T = TypeVar("T")
R = TypeVar("R")

CONFIGURED = "configured"
TIMEOUT = "distributed.comm.timeouts.connect"
_PATIENCE = 10.0  # seconds to wait for scheduler and workers, unless dask's configuration says
_LOOK = 1.0  # seconds between two looks at who is there
_WAY = 60.0  # seconds after which a result that does not come is asked for again
_CLOSING = 3.0  # seconds that the good-bye may take
_ANEW = 3  # how often the common object is sent anew where all workers that had it are gone

# Typed in part only, and otherwise in other versions.
_dask: Any = distributed

log = logging.getLogger(__name__)


@dataclass
class Pending:
    """A task under way, and which sending of the common object it rests on."""

    payload: bytes
    future: Any
    sending: int


class ClusterWorkers:
    """The workers of a cluster, with the common object in each.

    Parameters
    ----------
    cluster : Cluster
    common : any picklable object

    Raises
    ------
    SettingsError
        if the settings name no scheduler.
    EnsembleHorizonError
        if there is no scheduler, no worker, or one that is not fit.
    """

    def __init__(self, cluster: Cluster, common: Any) -> None:
        self._cluster = cluster
        self._common = common
        self._address = scheduler_address(cluster.scheduler, cluster.base)
        self._patience = patience()
        self._levels = {name: logging.getLogger(name).level for name in _NOISY}
        self._set_levels(dict.fromkeys(_NOISY, logging.CRITICAL))
        self._client: Any = None
        self._sending = 0
        self._looked = monotonic()
        self._idle_since: float | None = None
        try:
            self._client = _connect(self._address, self._patience)
            with self._translated():
                self._workers = self._first_workers()
                self._require_fit(self._workers)
                self._send_common()
        except BaseException:
            self.close()
            raise
        log.info("%s workers at %s", len(self._workers), self._address)

    @property
    def window(self) -> int:
        """Two tasks for each worker: one that it does and one that waits for it."""
        return 2 * max(len(self._workers), 1)

    def submit(self, function: Callable[[T], R], task: T) -> Pending:
        """Hand out a task."""
        payload = pickle.dumps((function, task), protocol=pickle.HIGHEST_PROTOCOL)
        with self._translated():
            return Pending(payload, self._submitted(payload), self._sending)

    def result(self, pending: Pending) -> Any:
        """What a task gave, when it is done."""
        with self._translated():
            while True:
                try:
                    with self._client.as_current():
                        _dask.wait(pending.future, timeout=_LOOK)
                    # What a task raised comes at once; only the way of a result takes time.
                    limit = None if pending.future.status == "error" else _WAY
                    found = pending.future.result(timeout=limit)
                except TimeoutError:
                    if pending.future.status == "error":
                        raise
                    self._look_around()
                except CancelledError:
                    self._again(pending)
                except ImportError:
                    self._require_fit(self._present())
                    raise
                else:
                    pending.future.release()
                    if monotonic() - self._looked > _LOOK:
                        self._look_around()
                    return found

    def drop(self, pending: Pending) -> None:
        """Do without a task."""
        pending.future.release()

    def close(self) -> None:
        """Close the files that workers keep open, and the connection."""
        client, self._client = self._client, None
        if client is not None:
            if client.status == "running":
                with suppress(Exception):
                    self._tell_lost(set(client.nthreads()))
                    client.run(close_files, on_error="ignore")
            with suppress(Exception):
                client.close(timeout=_CLOSING)
        self._set_levels(self._levels)

    def _submitted(self, payload: bytes) -> Any:
        return self._client.submit(perform, self._sent, payload, pure=False)

    def _send_common(self) -> None:
        # In a list, as a tuple would be sent in pieces.
        (self._sent,) = self._client.scatter([self._common], broadcast=True, hash=False)
        self._sending += 1

    def _again(self, pending: Pending) -> None:
        """Hand a task out again that went with the last worker that had the common object."""
        reason = getattr(self._future_error(pending), "reason", "")
        if self._client.status != "running" or reason == "scheduler-connection-lost":
            raise CommClosedError("connection lost")
        if pending.sending == self._sending:
            if self._sending > _ANEW:
                raise _all_killed(self._address)
            self._look_around()
            try:
                self._send_common()
            except TimeoutError:  # nobody there to send it to
                sleep(_LOOK)
                return
        pending.future = self._submitted(pending.payload)
        pending.sending = self._sending

    def _future_error(self, pending: Pending) -> BaseException | None:
        try:
            pending.future.result(timeout=_LOOK)
        except BaseException as error:
            return error
        return None

    def _first_workers(self) -> set[str]:
        with suppress(TimeoutError):
            self._client.wait_for_workers(1, timeout=self._patience)
        found = self._present()
        if not found:
            raise _no_workers(self._address, self._patience)
        return found

    def _present(self) -> set[str]:
        try:
            return set(self._client.nthreads())
        except (OSError, TimeoutError) as error:
            raise CommClosedError(str(error)) from error

    def _require_fit(self, workers: set[str]) -> None:
        require_fit(self._client, workers, self._cluster.files, self._cluster.folder)

    def _look_around(self) -> None:
        """Tell of workers that are gone, probe those that are new, refuse to wait for nobody."""
        self._looked = monotonic()
        there = self._present()
        if there:
            self._idle_since = None
        elif self._idle_since is None:
            self._idle_since = self._looked
        elif self._looked - self._idle_since > self._patience:
            raise _no_workers(self._address, self._patience)
        self._tell_lost(there)
        fresh = there - self._workers
        self._workers = there
        if fresh:
            self._require_fit(fresh)

    def _tell_lost(self, there: set[str]) -> None:
        for address in sorted(self._workers - there):
            log.warning(
                "worker %s is gone; what it had under way is done again by the others", address
            )

    @contextmanager
    def _translated(self) -> Iterator[None]:
        try:
            yield
        except KilledWorker as error:
            raise _all_killed(self._address) from error
        except (CommClosedError, CancelledError) as error:
            raise _lost(self._address) from error

    @staticmethod
    def _set_levels(levels: dict[str, int]) -> None:
        for name, level in levels.items():
            logging.getLogger(name).setLevel(level)


_NOISY = ("distributed.client", "distributed.core", "distributed.batched", "distributed.comm")


def scheduler_address(scheduler: str, base: Path) -> str:
    """The address of the scheduler that the settings name.

    Raises
    ------
    SettingsError
        if there is none in the scheduler file, or in dask's configuration.
    """
    if "://" in scheduler:
        return scheduler
    if scheduler == CONFIGURED:
        address = dask.config.get("scheduler-address", None)
        if not address:
            raise SettingsError(
                "engine.scheduler",
                expected="a scheduler-address in dask's own configuration",
                found="none",
                remedy="set it there or in DASK_SCHEDULER_ADDRESS, or write the address here",
            )
        return str(address)
    path = base / scheduler
    try:
        return str(json.loads(path.read_text(encoding="utf-8"))["address"])
    except OSError as error:
        found = f"{path}: {error.strerror}"
    except (ValueError, KeyError, TypeError):
        found = f"{path}, which holds no address"
    raise SettingsError(
        "engine.scheduler",
        expected="a file that the scheduler wrote",
        found=found,
        remedy="start the scheduler with --scheduler-file, or write its address here",
    )


def patience() -> float:
    """Seconds to wait for the scheduler: what dask's configuration says, if anything was said."""
    own = dask.config.get(TIMEOUT, None, config=dask.config.merge(*dask.config.defaults))
    said = dask.config.get(TIMEOUT, own)
    return _PATIENCE if said == own else float(parse_timedelta(said))


def _connect(address: str, patience: float) -> Any:
    try:
        return _dask.Client(
            address, timeout=patience, set_as_default=False, name="ensemble-horizon"
        )
    except (OSError, TimeoutError) as error:
        raise EnsembleHorizonError(
            f"the scheduler at {address}",
            expected=f"an answer within {patience:g} s",
            found=_first_line(error),
            remedy=(
                "start the scheduler, or correct engine.scheduler, or take it out to work on this "
                f"machine; {TIMEOUT} in dask's configuration says how long to wait"
            ),
        ) from error
    except (TypeError, ValueError, RuntimeError) as error:
        raise EnsembleHorizonError(
            f"the scheduler at {address}",
            expected="a connection, encrypted where the address begins with tls",
            found=_first_line(error),
            remedy="name the certificates under distributed.comm.tls in dask's configuration",
        ) from error


def _first_line(error: BaseException) -> str:
    lines = str(error).strip().splitlines()
    return lines[0].rstrip(".") if lines else type(error).__name__


def _no_workers(address: str, patience: float) -> EnsembleHorizonError:
    return EnsembleHorizonError(
        f"the cluster at {address}",
        expected="a worker",
        found=f"none within {patience:g} s",
        remedy="start workers of that scheduler and run again",
    )


def _lost(address: str) -> EnsembleHorizonError:
    return EnsembleHorizonError(
        f"the scheduler at {address}",
        expected="it to stay until the work is done",
        found="that the connection was lost",
        remedy="see that the scheduler runs, then run again; nightly goes on where it stopped",
    )


def _all_killed(address: str) -> EnsembleHorizonError:
    return EnsembleHorizonError(
        f"the cluster at {address}",
        expected="workers to finish their tasks",
        found="a task whose workers were killed again and again, most often for want of memory",
        remedy="give the workers more memory or lower engine.block_memory_mib, and run again",
    )
