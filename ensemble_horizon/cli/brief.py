"""The command ``brief``."""

from __future__ import annotations

import click

from ensemble_horizon.cli.session import common_options, console
from ensemble_horizon.night.brief import brief_and_write
from ensemble_horizon.settings import read_settings


@click.command("brief")
@click.argument("config", type=click.Path())
@click.option(
    "--versions", type=click.Path(),
    help="Folder that compare wrote; by default the one that [night] names, if any.",
)  # fmt: skip
@common_options
def command(config: str, versions: str | None, quiet: bool) -> None:
    """Make the briefing of the latest start from what estimate wrote by CONFIG.

    Writes briefing.html, one page that stands alone, and briefing.pdf, one sheet of A4, beside
    the other products. What is usual comes from the archive that [night] names, if any.
    """
    briefing, paths = brief_and_write(read_settings(config), versions)
    if quiet:
        return
    screen = console()
    for line in (*briefing.troubles, *briefing.notes):
        screen.print(f"- {line}", highlight=False, markup=False)
    names = " and ".join(path.name for path in paths)
    folder = paths[0].parent.resolve()
    screen.print(f"{names} in {folder}", highlight=False, markup=False, soft_wrap=True)
