"""What all commands share: options, logs on stderr, progress, and errors as one clear message."""

from __future__ import annotations

import functools
import logging
import sys
import traceback
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from time import monotonic
from typing import Any, NoReturn

import click
from rich.console import Console
from rich.progress import BarColumn, Progress, TaskID, TextColumn, TimeRemainingColumn

from ensemble_horizon.errors import EnsembleHorizonError

_PATIENCE = 2.0  # seconds before a progress bar is worth showing


def common_options(function: Callable[..., Any]) -> Callable[..., Any]:
    """Add ``--quiet``, ``--verbose`` and ``--debug``, and turn errors into messages."""

    @click.option("--quiet", "-q", is_flag=True, help="No progress and no tables.")
    @click.option("--verbose", "-v", is_flag=True, help="Log the duration of each stage.")
    @click.option("--debug", is_flag=True, help="Show where an error came from.")
    @functools.wraps(function)
    def wrapped(*args: Any, quiet: bool, verbose: bool, debug: bool, **options: Any) -> Any:
        _start_logs(quiet, verbose or debug)
        try:
            return function(*args, quiet=quiet, **options)
        except EnsembleHorizonError as error:
            _stop(str(error), error.exit_status, debug)
        except click.exceptions.Exit:
            raise
        except click.ClickException:
            raise
        except (KeyboardInterrupt, click.Abort):
            _stop("stopped; nothing half-written was left", 130, debug)
        except MemoryError:
            _stop(
                "memory: expected enough for one block of all members; found none left. "
                "Next: lower engine.block_memory_mib or engine.workers.", 1, debug,
            )  # fmt: skip
        except Exception as error:
            _stop(
                f"a fault of ours: {type(error).__name__}: {error}. "
                "Next: run again with --debug and report what it prints.", 1, debug,
            )  # fmt: skip

    return wrapped


def _start_logs(quiet: bool, verbose: bool) -> None:
    level = logging.ERROR if quiet else logging.INFO if verbose else logging.WARNING
    handler = logging.StreamHandler(sys.stderr)
    handler.setFormatter(logging.Formatter("%(asctime)s %(levelname)s %(message)s"))
    root = logging.getLogger("ensemble_horizon")
    root.handlers[:] = [handler]
    root.setLevel(level)
    root.propagate = False


def _stop(message: str, status: int, debug: bool) -> NoReturn:
    if debug:
        traceback.print_exc()
    click.echo(f"ensemble-horizon: {message}", err=True)
    raise SystemExit(status)


def console() -> Console:
    """Where tables are printed; wide enough for a table when stdout is no terminal."""
    if sys.stdout.isatty():
        return Console()
    return Console(width=150)


class Bars:
    """Progress bars on stderr, shown once the work has taken two seconds."""

    def __init__(self, bars: Progress | None) -> None:
        self._bars = bars
        self._tasks: dict[str, TaskID] = {}
        self._begun = monotonic()

    def __call__(self, stage: str, done: float, total: float) -> None:
        """Note that ``done`` of ``total`` of a stage is done."""
        if self._bars is None or monotonic() - self._begun < _PATIENCE:
            return
        if stage not in self._tasks:
            self._tasks[stage] = self._bars.add_task(stage, total=total)
            self._bars.start()
        self._bars.update(self._tasks[stage], completed=done, total=total)
        self._bars.refresh()


@contextmanager
def progress(quiet: bool) -> Iterator[Bars]:
    """Progress bars for the block; none with ``--quiet`` or where stderr is no terminal."""
    target = Console(stderr=True)
    if quiet or not target.is_terminal:
        yield Bars(None)
        return
    bars = Progress(
        TextColumn("{task.description}"), BarColumn(), TextColumn("{task.percentage:3.0f}%"),
        TimeRemainingColumn(), console=target, transient=True,
        auto_refresh=False,  # no thread of its own: worker processes are copies of this one
    )  # fmt: skip
    try:
        yield Bars(bars)
    finally:
        bars.stop()
