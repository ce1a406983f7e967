"""The command ``nightly``."""

from __future__ import annotations

import contextlib
import logging
from typing import Literal

import click

from ensemble_horizon.cli.session import common_options, progress
from ensemble_horizon.errors import EnsembleHorizonError
from ensemble_horizon.night.chain.nightly import Options, run_night
from ensemble_horizon.night.chain.report import NightReport
from ensemble_horizon.settings import read_settings


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
@common_options
def command(
    config: str,
    start: str | None,
    wait_minutes: float | None,
    report_file: str | None,
    if_busy: Literal["wait", "leave"],
    quiet: bool,
) -> None:
    """Survey, estimate, verify, brief and archive one start of the runs that CONFIG names.

    Does what is not done, or no longer true; run it again after it failed or was killed. The
    products go to a folder of their own for each start, below the one that CONFIG names.
    """
    if not quiet:
        logging.getLogger("ensemble_horizon").setLevel(logging.INFO)
    report = NightReport(config)
    error: BaseException | None = None
    status = 0
    try:
        settings = read_settings(config)
        with progress(quiet) as bars:
            run_night(settings, Options(start, wait_minutes, if_busy), report, bars)
    except EnsembleHorizonError as known:
        error, status = known, known.exit_status
        raise
    except BaseException as other:
        error, status = other, 130 if isinstance(other, KeyboardInterrupt) else 1
        raise
    finally:
        if report_file is not None:
            _write(report, report_file, error, status)


def _write(report: NightReport, path: str, error: BaseException | None, status: int) -> None:
    """Write the report; where the night itself failed, that is what is told."""
    failed = contextlib.suppress(EnsembleHorizonError) if error is not None else None
    with failed or contextlib.nullcontext():
        report.write(path, error, status)
