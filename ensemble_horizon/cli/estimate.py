"""The command ``estimate``."""

from __future__ import annotations

import click
from rich import box
from rich.console import Console
from rich.table import Table
from rich.text import Text

from ensemble_horizon.cli.session import common_options, console, progress
from ensemble_horizon.night.plan import Plan, VariablePlan, plan_estimate
from ensemble_horizon.night.writing import estimate_and_write
from ensemble_horizon.products import limits_table
from ensemble_horizon.settings import read_settings


@click.command("estimate")
@click.argument("config", type=click.Path())
@click.option(
    "--plan", "only_plan", is_flag=True,
    help="Say what would be read, held in memory and written, and how long it would take.",
)  # fmt: skip
@common_options
def command(config: str, only_plan: bool, quiet: bool) -> None:
    """Measure spread and growth in the runs that CONFIG names, and place the limits.

    Writes horizons.csv, horizons.nc, horizon_maps.nc and figures/ to the folder that CONFIG
    names, and prints the table of limits, the shortest first. With --plan nothing is computed or
    written: headers are read, and a few blocks to measure the time.
    """
    settings = read_settings(config)
    if only_plan:
        plan = plan_estimate(settings)
        if not quiet:
            _show(console(), plan)
        return
    with progress(quiet) as bars:
        found, paths = estimate_and_write(settings, bars)
    if quiet:
        return
    screen = console()
    screen.print(limits_table(found.results))
    folder = settings.path(settings.products.folder).resolve()
    screen.print(f"{len(paths)} products in {folder}", highlight=False, soft_wrap=True)


def _show(screen: Console, plan: Plan) -> None:
    table = Table(
        title=f"To be read: {_shape(plan)}",
        title_justify="left",
        box=box.SIMPLE_HEAD,
    )
    table.add_column("variable", overflow="fold")
    for heading in ("files", "fields", "on disk", "values", "decompressed", "chunks", "tasks"):
        table.add_column(heading, justify="right")
    table.add_column("largest task: members x leads x points", justify="right")
    for item in plan.variables:
        table.add_row(*_cells(item))
    screen.print(table)
    for line in (*_costs(plan), *plan.warnings):
        screen.print(Text(line), soft_wrap=True)


def _shape(plan: Plan) -> str:
    counted = (("start", plan.starts), ("member", plan.members), ("lead", plan.leads))
    runs = " x ".join(f"{count} {noun}{'s' if count > 1 else ''}" for noun, count in counted)
    grid = "".join(f" x {length}" for length in plan.grid)
    return f"{runs}{grid}, {plan.files} file{'s' if plan.files > 1 else ''}"


def _cells(item: VariablePlan) -> list[Text]:
    volumes = item.volumes
    block = f"{' x '.join(map(str, item.block))} = {_bytes(item.block_bytes)}"
    cells = [
        item.name,
        str(max(volume.files for volume in volumes)),
        str(sum(volume.fields for volume in volumes)),
        f"about {_bytes(sum(volume.stored for volume in volumes))}",
        _bytes(item.values),
        _bytes(sum(volume.unpacked for volume in volumes)),
        str(sum(volume.reads for volume in volumes) or "none"),
        str(item.tasks),
        block,
    ]
    return [Text(cell) for cell in cells]


def _costs(plan: Plan) -> list[str]:
    workers = f"{plan.workers} worker{'s' if plan.workers > 1 else ''}"
    lines = [
        f"Memory: about {_bytes(plan.task)} a task, {_bytes(plan.kept)} kept between tasks; "
        f"{_bytes(plan.whole)} in all with {workers} and the libraries."
    ]
    if plan.pace is None or plan.seconds is None:
        lines.append("Time: not measured, because one chunk is more than a sample may read.")
    else:
        points = " and fits of made-up curves" if plan.curve else ""
        lines.append(
            f"Time: {_duration(plan.seconds[0])} to {_duration(plan.seconds[1])} with {workers}, "
            f"figures not counted; scaled from {_bytes(plan.pace.values)} read just now{points}."
        )
    figures = f" and {plan.figures} figures" if plan.figures else ""
    lines.append(f"Products: {', '.join(plan.products)}{figures} in {plan.folder}.")
    lines.append("Nothing was computed or written.")
    return lines


def _bytes(size: float) -> str:
    for unit in ("B", "KiB", "MiB", "GiB"):
        if size < 1024:
            return f"{size:.3g} {unit}" if size < 100 else f"{size:.0f} {unit}"
        size /= 1024
    return f"{size:.3g} TiB" if size < 100 else f"{size:.0f} TiB"


def _duration(seconds: float) -> str:
    if seconds < 90:
        return f"{seconds:.0f} s"
    return f"{seconds / 60:.0f} min" if seconds < 5400 else f"{seconds / 3600:.1f} h"
