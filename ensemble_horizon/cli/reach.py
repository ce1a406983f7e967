"""The command ``reach``."""

from __future__ import annotations

import click
import numpy as np
from rich.markup import escape
from rich.table import Table

from ensemble_horizon.cli.session import common_options, console
from ensemble_horizon.errors import SettingsError
from ensemble_horizon.night.reaching import Reach, reach_of_products
from ensemble_horizon.products.wording import duration, number
from ensemble_horizon.settings import read_settings
from ensemble_horizon.vocabulary import CAUTION


@click.command("reach")
@click.argument("config", type=click.Path())
@click.option("--variable", required=True, help="A variable of the settings.")
@click.option("--place", help="A region or site; all of them where it is left out.")
@click.option(
    "--tolerance", "tolerances", type=float, multiple=True, required=True,
    help="In the units of the variable; may be repeated.",
)  # fmt: skip
@click.option(
    "--smaller", "factors", type=float, multiple=True, default=(2.0, 10.0), show_default=True,
    help="Divide the initial error by this; may be repeated.",
)  # fmt: skip
@common_options
def command(
    config: str,
    variable: str,
    place: str | None,
    tolerances: tuple[float, ...],
    factors: tuple[float, ...],
    quiet: bool,
) -> None:
    """Say how much lead a smaller initial error, or another tolerance, would buy.

    Asks the laws that the last estimate with CONFIG fitted, pooled over starts where there were
    several; run that first.
    """
    for option, amounts in (("--tolerance", tolerances), ("--smaller", factors)):
        for amount in amounts:
            if not 0 < amount < np.inf:
                raise SettingsError(
                    option,
                    expected="a finite number above zero",
                    found=f"{amount:g}",
                    remedy="correct it",
                )
    settings = read_settings(config)
    answers = reach_of_products(settings, variable, place, tolerances, (1.0, *factors))
    if quiet:
        return
    screen = console()
    for answer in answers:
        screen.print(_bought(answer), _doubling(answer))
    screen.print(
        "Limits here are those of the fitted law; the estimate gives those of the measured curve, "
        "so compare the gains. No limit: the law never comes to the tolerance from there, or it "
        "saturates below. A law fitted to this run is taken beyond what the run shows wherever "
        "errors are smaller, or leads longer, than in it.",
        CAUTION,
        style="italic",
    )


def _bought(answer: Reach) -> Table:
    fitted = (
        f"{answer.law} law, initial error {number(answer.initial_error)} {answer.units}"
        if np.isfinite(answer.initial_error)
        else "no law could be fitted"
    )
    title = f"{answer.place}, {answer.variable}, {answer.start}: {fitted}"
    table = Table(title=escape(title), title_justify="left")
    table.add_column(escape(f"tolerance ({answer.units})"), justify="right")
    for factor in answer.bought["error_factor"].values:
        as_it_is = factor == 1
        table.add_column("error as it is" if as_it_is else f"error / {factor:g}", justify="right")
    table.add_column("perfect start", justify="right")
    for position, size in enumerate(answer.bought["tolerance"].values):
        row = answer.bought.isel({"tolerance": position})
        cells = [
            _lead(float(limit), float(gain), answer)
            for limit, gain in zip(row["horizon"].values, row["gained"].values, strict=True)
        ]
        table.add_row(f"{size:g}", *cells, _lead(float(row["perfect"]), 0.0, answer))
    return table


def _lead(limit: float, gain: float, answer: Reach) -> str:
    if np.isnan(limit):
        return "no fit"
    if np.isinf(limit):
        return "no limit"
    text = duration(limit, answer.lead_units)
    if limit > answer.last_lead:
        text += " (beyond the run)"
    return f"{text} (+{duration(gain, answer.lead_units)})" if gain > 0 else text


def _doubling(answer: Reach) -> Table:
    table = Table(title="Doubling time by error size", title_justify="left")
    for size in answer.sizes:
        table.add_column(escape(f"{number(float(size))} {answer.units}"), justify="right")
    cells = [
        duration(float(time), answer.lead_units) if np.isfinite(time) else "never"
        for time in answer.doubling
    ]
    if cells:
        table.add_row(*cells)
    return table
