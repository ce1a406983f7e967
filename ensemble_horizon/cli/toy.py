"""The command ``toy``: systems with known limits, their exponents, and rehearsals with them."""

from __future__ import annotations

import click
from rich.markup import escape
from rich.table import Table

from ensemble_horizon.cli.session import common_options, console, progress
from ensemble_horizon.errors import SettingsError
from ensemble_horizon.night.rehearsal import Rehearsed, rehearse
from ensemble_horizon.night.toy_values import METHODS, MeasuredExponents, Row, measure_exponents
from ensemble_horizon.settings.rehearsal import read_rehearsal
from ensemble_horizon.toys import SYSTEMS, PublishedValue, System


@click.group("toy")
def command() -> None:
    """Toy systems whose limits are known: list them, measure them, rehearse with them."""


@command.command("list")
@common_options
def list_systems(quiet: bool) -> None:
    """Name the toy systems, their parameters and what is known of them."""
    if quiet:
        return
    table = Table(title="Toy systems", title_justify="left", show_lines=True)
    for heading in ("system", "variables", "time unit", "parameters", "known values"):
        table.add_column(heading, justify="right" if heading == "variables" else "left")
    for kind in SYSTEMS.values():
        system = kind()
        table.add_row(
            f"[bold]{kind.name}[/bold]\n{escape(kind.title)}",
            str(system.size),
            "none" if kind.time_units == "1" else kind.time_units,
            escape(_parameters(system)),
            escape("\n".join(_known(kind.published))),
        )
    console().print(table)


@command.command("run")
@click.argument("config", type=click.Path())
@common_options
def run(config: str, quiet: bool) -> None:
    """Run the twin experiment that CONFIG describes and write its archive.

    A truth run, analyses of it, and ensembles from many starts for every version of the model, as
    run and analysis files, with settings ready for the command estimate. What an earlier run with
    the same CONFIG finished is kept; the rest is added.
    """
    settings = read_rehearsal(config)
    with progress(quiet) as bars:
        found = rehearse(settings, bars)
    if not quiet:
        _summary(found)


@command.command("exponents")
@click.argument("name")
@click.option(
    "--parameters", multiple=True, metavar="NAME=VALUE",
    help="Set a parameter of the system; may be repeated.",
)  # fmt: skip
@click.option("--count", type=int, help="How many exponents; all of them where it is left out.")
@click.option("--length", type=float, help="Model time to average over, in the system's unit.")
@click.option(
    "--method", default="qr", show_default=True, metavar="|".join(METHODS),
    help="Tangents with repeated QR, or two runs side by side.",
)  # fmt: skip
@click.option("--seed", type=int, default=0, show_default=True)
@common_options
def exponents(
    name: str,
    parameters: tuple[str, ...],
    count: int | None,
    length: float | None,
    method: str,
    seed: int,
    quiet: bool,
) -> None:
    """Measure the Lyapunov exponents of the toy system NAME, published values beside."""
    given = dict(_parameter(text) for text in parameters)
    with progress(quiet) as bars:
        measured = measure_exponents(
            name, given, count=count, length=length, method=method, seed=seed,
            progress=lambda done, total: bars("exponents", done, total),
        )  # fmt: skip
    if not quiet:
        _print_exponents(measured)


def _parameter(text: str) -> tuple[str, float]:
    name, _, value = text.partition("=")
    try:
        return name.strip(), float(value)
    except ValueError as error:
        raise SettingsError(
            "--parameters",
            expected="NAME=VALUE with a number, such as rho=45.92",
            found=repr(text),
            remedy="correct it",
        ) from error


def _parameters(system: System) -> str:
    lines = []
    for name, item in system.parameters.items():
        units = "" if item.units == "1" else f" {item.units}"
        lines.append(f"{name} = {item.value:g}{units}: {item.meaning}")
    return "\n".join(lines)


def _known(published: tuple[PublishedValue, ...]) -> list[str]:
    """Return a line for each source and set of parameters."""
    lines: dict[tuple[str, str], list[str]] = {}
    for value in published:
        where = ", ".join(f"{name}={amount:g}" for name, amount in value.parameters)
        told = f"{value.quantity.replace('_', ' ')} {_amounts(value)}"
        lines.setdefault((where, value.source), []).append(told)
    return [
        "; ".join(told) + (f" at {where}" if where else "") + f": {source}"
        for (where, source), told in lines.items()
    ]


def _amounts(value: PublishedValue) -> str:
    amounts = value.value if isinstance(value.value, tuple) else (value.value,)
    return ", ".join(f"{amount:g}" for amount in amounts)


def _summary(found: Rehearsed) -> None:
    screen = console()
    experiment = found.experiment
    kept = f", {found.found} kept from before" if found.found else ""
    screen.print(
        f"{found.made} ensembles of {experiment.members} members x {experiment.leads} leads made"
        f"{kept}; "
        f"{experiment.analysis_count} analyses, truth and climatology, in {found.folder}",
        highlight=False, soft_wrap=True,
    )  # fmt: skip
    for name, path in found.settings.items():
        kept = ", kept as it was, not as CONFIG says now" if path in found.differing else ""
        screen.print(f"version {name}: ensemble-horizon estimate {path}{kept}", highlight=False,
                     soft_wrap=True)  # fmt: skip


def _print_exponents(measured: MeasuredExponents) -> None:
    found, system = measured.found, measured.system
    unit = "" if found.time_units == "1" else f" {found.time_units}"
    title = (
        f"{system.title}: {found.members} runs, {found.length:g}{unit} averaged over in all, "
        f"{found.confidence:.0%} intervals"
    )
    table = Table(title=escape(title), title_justify="left")
    for heading in ("quantity", "value", "low", "high", "units", "published", "source"):
        table.add_column(
            heading, justify="right" if heading in ("value", "low", "high") else "left"
        )
    for row in (*measured.exponents, *measured.derived):
        table.add_row(*(escape(text) for text in _cells(row)))
    screen = console()
    screen.print(table)
    for row in measured.derived:
        if row.refusal:
            screen.print(f"No {row.quantity}: {row.refusal}.", highlight=False)


def _cells(row: Row) -> list[str]:
    item = row.estimate
    measured = ["-", "-", "-", ""] if item is None else [
        *(f"{value:.4g}" for value in (item.value, item.low, item.high)), item.units
    ]  # fmt: skip
    values = "\n".join(_amounts(value) for value in row.published)
    return [row.quantity, *measured, values, "\n".join(value.source for value in row.published)]
