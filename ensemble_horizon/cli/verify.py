"""The command ``verify``."""

from __future__ import annotations

import click

from ensemble_horizon.cli.session import common_options, console, progress
from ensemble_horizon.night.verification.writing import verify_and_write
from ensemble_horizon.products.score_table import ratio_table, skill_table
from ensemble_horizon.settings import read_settings


@click.command("verify")
@click.argument("config", type=click.Path())
@click.option(
    "--calibration",
    type=click.Path(dir_okay=False),
    metavar="FILE",
    help="Write factors from spread to error, for [calibration] of estimate.",
)
@common_options
def command(config: str, calibration: str | None, quiet: bool) -> None:
    """Score the runs of all starts that CONFIG names against analyses and observations.

    Writes scores.csv, skill_limits.csv, scores.nc, score_maps.nc and figures/ to the folder that
    CONFIG names, and prints spread and error, and the leads at which skill ends.
    """
    settings = read_settings(config)
    with progress(quiet) as bars:
        found, paths = verify_and_write(settings, calibration, bars)
    if quiet:
        return
    screen = console()
    screen.print(ratio_table(found.results))
    screen.print(skill_table(found.results))
    folder = settings.path(settings.products.folder).resolve()
    screen.print(f"{len(paths)} products in {folder}", highlight=False, soft_wrap=True)
    if calibration is not None:
        screen.print(f"factors in {calibration}", highlight=False, soft_wrap=True)
