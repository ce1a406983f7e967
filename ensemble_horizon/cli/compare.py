"""The command ``compare``."""

from __future__ import annotations

from pathlib import Path

import click

from ensemble_horizon.cli.session import common_options, console, progress
from ensemble_horizon.errors import SettingsError
from ensemble_horizon.night.comparison.comparing import compare_and_write
from ensemble_horizon.products import (
    difference_table,
    gains,
    gains_table,
    starts_words,
    summary_words,
)
from ensemble_horizon.settings import read_settings


@click.command("compare")
@click.argument("a", type=click.Path())
@click.argument("b", type=click.Path())
@click.option(
    "--folder", type=click.Path(),
    help="Where the products go; by default versions_A_B beside the settings of A.",
)  # fmt: skip
@click.option(
    "--labels", type=str, nargs=2,
    help="Names of the two versions; by default those of the settings files.",
)  # fmt: skip
@common_options
def command(
    a: str, b: str, folder: str | None, labels: tuple[str, str] | None, quiet: bool
) -> None:
    """Say how many hours version B gains over version A on the starts that both have.

    A and B are settings files as for estimate. Writes versions.csv, versions.nc and figures/, and
    prints the table of hours gained, what is told apart first. Where both name analyses or
    observations, the differences of their scores come with it.
    """
    names = labels or _labels(Path(a), Path(b))
    if names[0] == names[1] or not all(name.strip() for name in names):
        raise SettingsError(
            "--labels",
            expected="two different names",
            found=f"{names[0]!r} and {names[1]!r}",
            remedy="give each version a name of its own",
        )
    settings = (read_settings(a), read_settings(b))
    stems = "_".join(name.replace("/", "_") for name in names)
    target = Path(folder) if folder else settings[0].path(f"versions_{stems}")
    with progress(quiet) as bars:
        found, paths = compare_and_write(settings, names, target, bars)
    if quiet:
        return
    rows = gains(result.places for result in found.results)
    screen = console()
    for words in (summary_words(rows), f"{starts_words(found.results[0].places)}."):
        screen.print(words, highlight=False, markup=False)
    screen.print(gains_table(rows))
    if found.scores:
        screen.print(difference_table(found.scores))
    for heading, lines in (
        ("Not compared", found.notes.left_out),
        ("Keep in mind", found.notes.cautions),
    ):
        if lines:
            screen.print(f"{heading}:", highlight=False)
        for line in lines:
            screen.print(f"- {line}", highlight=False, markup=False)
    products = f"{len(paths)} products in {target.resolve()}"
    screen.print(products, highlight=False, markup=False, soft_wrap=True)


def _labels(a: Path, b: Path) -> tuple[str, str]:
    """Names of the files without ending; where they are alike, with their folders."""
    if a.stem != b.stem:
        return a.stem, b.stem
    first, second = (f"{path.resolve().parent.name}/{path.stem}" for path in (a, b))
    return (first, second) if first != second else (f"{a.stem} (1)", f"{b.stem} (2)")
