"""The command ``nightly``."""

from __future__ import annotations

import contextlib
import logging
import os
import signal
import threading
from collections.abc import Iterator
from types import FrameType
from typing import Literal

import click

from ensemble_horizon.cli.session import common_options, progress
from ensemble_horizon.errors import EnsembleHorizonError
from ensemble_horizon.night.chain.members import asked_for
from ensemble_horizon.night.chain.nightly import Options, run_night
from ensemble_horizon.night.chain.report import NightReport
from ensemble_horizon.settings import read_settings

_TERMINATED = 128 + signal.SIGTERM


class _TerminatedError(KeyboardInterrupt):
    """The process was asked to end, as systemd asks it to; all that is open is closed."""


@click.command("nightly")
@click.argument("config", type=click.Path())
@click.option("--start", metavar="S", help="The start in ISO 8601; the newest complete one else.")
@click.option(
    "--wait",
    "wait_minutes",
    type=click.FloatRange(min=0),
    metavar="MINUTES",
    help="How long to wait for late members; night.wait_minutes else.",
)
@click.option(
    "--report",
    "report_file",
    type=click.Path(dir_okay=False),
    metavar="FILE",
    help="Write a summary as JSON, also of a run that fails.",
)
@click.option(
    "--if-busy",
    type=click.Choice(["wait", "leave"]),
    default="leave",
    show_default=True,
    help="What to do while another run is at work in the same folder.",
)
@click.option(
    "--adopt-archive",
    is_flag=True,
    help="Go on with an archive whose record names other runs: where runs or products have moved.",
)
@common_options
def command(
    config: str,
    start: str | None,
    wait_minutes: float | None,
    report_file: str | None,
    if_busy: Literal["wait", "leave"],
    adopt_archive: bool,
    quiet: bool,
) -> None:
    """Survey, estimate, verify, brief and archive one start of the runs that CONFIG names.

    Does what is not done, or no longer true; run it again after it failed or was killed. The
    products go to a folder of their own for each start, below the one that CONFIG names.
    """
    if not quiet:
        logging.getLogger("ensemble_horizon").setLevel(logging.INFO)
    report = NightReport(config, start=asked_for(start))
    error: BaseException | None = None
    status = 0
    try:
        with _terminable():
            settings = read_settings(config)
            options = Options(start, wait_minutes, if_busy, adopt_archive)
            with progress(quiet) as bars:
                run_night(settings, options, report, bars)
    except EnsembleHorizonError as known:
        error, status = known, known.exit_status
        raise
    except _TerminatedError as asked:
        error, status = asked, _TERMINATED
        click.echo("ensemble-horizon: asked to end; nothing half-written was left", err=True)
        raise SystemExit(status) from asked
    except BaseException as other:
        error, status = other, 130 if isinstance(other, KeyboardInterrupt) else 1
        raise
    finally:
        if report_file is not None:
            _write(report, report_file, error, status)


@contextlib.contextmanager
def _terminable() -> Iterator[None]:
    """Turn the signal SIGTERM into an exception, once, in this process and not in its workers."""
    if threading.current_thread() is not threading.main_thread():
        yield
        return
    ours = os.getpid()

    def end(number: int, frame: FrameType | None) -> None:
        if os.getpid() != ours:
            signal.signal(number, signal.SIG_DFL)
            os.kill(os.getpid(), number)
            return
        signal.signal(number, signal.SIG_IGN)
        raise _TerminatedError

    before = signal.signal(signal.SIGTERM, end)
    try:
        yield
    finally:
        signal.signal(signal.SIGTERM, before)


def _write(report: NightReport, path: str, error: BaseException | None, status: int) -> None:
    """Write the report; where the night itself failed, that is what is told."""
    failed = contextlib.suppress(EnsembleHorizonError) if error is not None else None
    with failed or contextlib.nullcontext():
        report.write(path, error, status)
