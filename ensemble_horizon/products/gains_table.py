"""Tables of hours gained: ``versions.csv`` for programs, a short one for the terminal."""

from __future__ import annotations

import os
from collections.abc import Iterable, Sequence
from pathlib import Path

import numpy as np
import xarray as xr
from rich import box
from rich.table import Table
from rich.text import Text

from ensemble_horizon.products.gains import Gain, gains, telling_first
from ensemble_horizon.products.rows import cell, write_rows
from ensemble_horizon.products.wording import duration

COLUMN_NOTES = {
    "variable": "name of the variable in the settings",
    "place": "region or site",
    "kind": "kind of place: region or site",
    "criterion": "name of the criterion in the settings",
    "starts": "common starts that have data under both versions",
    "horizon_a": "mean horizon of version a, each counted up to counted_to",
    "horizon_b": "the same of version b",
    "hours_gained": "horizon_b less horizon_a: above zero where b holds longer",
    "low": "lower end of the interval of hours_gained; empty where there is none",
    "high": "upper end",
    "p_value": "against no gain, two-sided, paired, successive starts not taken as independent",
    "adjusted_p_value": "the same for the number of rows (false discovery rate)",
    "survives": "yes where adjusted_p_value is at most 0.1",
    "log_rank_p": "second opinion: log-rank test, starts as independent and unpaired",
    "beyond_a": "starts whose limit under version a lies beyond counted_to",
    "beyond_b": "the same of version b",
    "counted_to": "end of the shorter runs; what is gained beyond it is not counted",
    "units": "units of the horizons, of hours_gained, low, high and counted_to",
    "reason": "given, or why there is no interval: few_starts (under ten), no_scatter (the same "
    "difference at every start)",
}
COLUMNS = tuple(COLUMN_NOTES)


def write_gains_table(path: str | os.PathLike[str], tables: Iterable[xr.Dataset]) -> Path:
    """Write ``versions.csv``: one row per variable, place and criterion.

    UTF-8, comma separated, quoted where needed, the header in the first line. A cell is empty where
    there is no number; `COLUMN_NOTES` describes every column.

    Parameters
    ----------
    path : path
        The file to write.
    tables : iterable of Dataset
        The ``places`` of each variable.

    Raises
    ------
    ProductError
        If the file cannot be written; nothing half-written stays behind.
    """
    return write_rows(path, COLUMNS, [_cells(row) for row in gains(tables)])


def gains_table(rows: Sequence[Gain]) -> Table:
    """Return the hours gained as a table for the terminal, what is told apart first.

    Parameters
    ----------
    rows : sequence of Gain, at least one
    """
    first = rows[0]
    end = duration(first.counted_to, first.units)
    table = Table(
        title=Text(f"Lead time gained by {first.version_b} over {first.version_a}"),
        caption=Text(
            f"Means of horizons counted up to {end}; in brackets the interval; 'holds longer' at a "
            "false discovery rate of 10 %.",
            style="italic",
        ),
        caption_justify="left",
        title_justify="left",
        box=box.SIMPLE_HEAD,
    )
    for heading in ("place", "variable", "criterion"):
        table.add_column(heading, overflow="fold")
    table.add_column(Text(first.version_a), justify="right", no_wrap=True)
    table.add_column(Text(first.version_b), justify="right", no_wrap=True)
    table.add_column("gained", no_wrap=True)
    table.add_column("verdict", overflow="fold")
    beyond = any(row.beyond_a or row.beyond_b for row in rows)
    if beyond:
        table.add_column(f"starts beyond {end}", justify="right")
    for row in telling_first(rows):
        cells = [
            Text(row.place),
            Text(row.variable),
            Text(row.criterion_text),
            Text(duration(row.horizon_a, row.units)),
            Text(duration(row.horizon_b, row.units)),
            Text(row.text, style="bold" if row.survives else ""),
            Text(row.verdict, style="bold" if row.survives else ""),
        ]
        if beyond:
            cells.append(Text(f"{row.beyond_a} → {row.beyond_b} of {row.starts}"))
        table.add_row(*cells)
    return table


def _cells(row: Gain) -> list[str]:
    told = np.isfinite(row.adjusted_p_value)
    return [
        row.variable,
        row.place,
        row.kind,
        row.criterion,
        str(row.starts),
        *map(cell, (row.horizon_a, row.horizon_b, row.gained, row.low, row.high)),
        cell(row.p_value),
        cell(row.adjusted_p_value),
        ("yes" if row.survives else "no") if told else "",
        cell(row.log_rank_p),
        str(row.beyond_a),
        str(row.beyond_b),
        cell(row.counted_to),
        row.units,
        row.reason,
    ]
