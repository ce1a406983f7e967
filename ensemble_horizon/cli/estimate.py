"""The command ``estimate``."""

from __future__ import annotations

import click

from ensemble_horizon.cli.session import common_options, console, progress
from ensemble_horizon.night.briefing import estimate_and_write
from ensemble_horizon.products import limits_table
from ensemble_horizon.settings import read_settings


@click.command("estimate")
@click.argument("config", type=click.Path())
@common_options
def command(config: str, quiet: bool) -> None:
    """Measure spread and growth in the runs that CONFIG names, and place the limits.

    Writes horizons.csv, horizons.nc, horizon_maps.nc and figures/ to the folder that CONFIG
    names, and prints the table of limits, the shortest first.
    """
    settings = read_settings(config)
    with progress(quiet) as bars:
        found, paths = estimate_and_write(settings, bars)
    if quiet:
        return
    screen = console()
    screen.print(limits_table(found.results))
    folder = settings.path(settings.products.folder).resolve()
    screen.print(f"{len(paths)} products in {folder}", highlight=False, soft_wrap=True)
