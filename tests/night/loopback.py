"""A dask cluster on this machine: scheduler and workers as processes of their own."""

from __future__ import annotations

import os
import subprocess
import sys
import time
from collections.abc import Mapping
from pathlib import Path

from distributed import Client

HERE = Path(__file__).parent


class Loopback:
    """A scheduler and its workers on the loopback interface; a context manager."""

    def __init__(
        self,
        folder: Path,
        workers: int = 2,
        threads: int = 1,
        protocol: str = "tcp",
        environment: Mapping[str, str] | None = None,
    ):
        self.folder = folder
        self.file = folder / "scheduler.json"
        self.started: list[subprocess.Popen[bytes]] = []
        self.environment = {
            **os.environ,
            "PYTHONPATH": str(HERE),  # where the task functions of the tests are
            "OPENBLAS_NUM_THREADS": "1",
            **(environment or {}),
        }
        self._wanted, self._threads, self._protocol = workers, threads, protocol
        self.workers: list[subprocess.Popen[bytes]] = []

    def __enter__(self) -> Loopback:
        self.scheduler = self._start(
            "distributed.cli.dask_scheduler", "--port", "0", "--no-dashboard",
            "--scheduler-file", str(self.file), "--protocol", self._protocol,
        )  # fmt: skip
        deadline = time.monotonic() + 60
        while not self.file.exists():
            assert self.scheduler.poll() is None, self.log()
            assert time.monotonic() < deadline, self.log()
            time.sleep(0.05)
        for _ in range(self._wanted):
            self.add_worker()
        self.wait()
        return self

    def __exit__(self, *_: object) -> None:
        for process in reversed(self.started):
            process.kill()
        for process in self.started:
            process.wait()

    def add_worker(
        self,
        python: str = sys.executable,
        folder: Path | None = None,
        environment: Mapping[str, str] | None = None,
    ) -> subprocess.Popen[bytes]:
        """Start one more worker."""
        process = self._start(
            "distributed.cli.dask_worker", "--scheduler-file", str(self.file), "--no-dashboard",
            "--no-nanny", "--nthreads", str(self._threads), "--local-directory", str(self.folder),
            "--protocol", self._protocol, python=python, folder=folder, environment=environment,
        )  # fmt: skip
        self.workers.append(process)
        return process

    def wait(self) -> None:
        """Wait until all workers that were started have come."""
        wanted = sum(process.poll() is None for process in self.workers)
        if wanted:
            with Client(scheduler_file=str(self.file), timeout=60, set_as_default=False) as client:
                client.wait_for_workers(wanted, timeout=60)

    def log(self) -> str:
        """What scheduler and workers said."""
        return "\n".join(path.read_text() for path in sorted(self.folder.glob("*.log")))

    def _start(
        self,
        module: str,
        *arguments: str,
        python: str = sys.executable,
        folder: Path | None = None,
        environment: Mapping[str, str] | None = None,
    ) -> subprocess.Popen[bytes]:
        host = ("--host", "127.0.0.1")
        with (self.folder / f"{len(self.started)}.log").open("wb") as log:
            process = subprocess.Popen(
                [python, "-m", module, *host, *arguments], stdout=log, stderr=subprocess.STDOUT,
                cwd=folder or self.folder, env={**self.environment, **(environment or {})},
            )  # fmt: skip
        self.started.append(process)
        return process
