"""Tables of limits: ``horizons.csv`` for programs, a short list for the terminal."""

from __future__ import annotations

import os
from collections.abc import Iterable
from pathlib import Path

import numpy as np
from rich import box
from rich.table import Table
from rich.text import Text

from ensemble_horizon.products.limits import Limit, VariableResult, limits
from ensemble_horizon.products.rows import cell, write_rows
from ensemble_horizon.products.wording import criterion_words, duration, number, rule_words
from ensemble_horizon.vocabulary import CAUTION, Status

COLUMNS = (
    "start",
    "variable",
    "place",
    "criterion",
    "threshold",
    "threshold_units",
    "horizon",
    "low",
    "high",
    "horizon_units",
    "status",
    "projected",
    "doubling_time",
    "law",
    "members",
)

COLUMN_NOTES = {
    "start": "start of the forecast, ISO 8601, UTC; 'all' where starts are pooled",
    "variable": "name of the variable in the settings",
    "place": "region or site",
    "criterion": "name of the criterion in the settings",
    "threshold": "what the spread is held against (a probability for a chance criterion); the "
    "criterion is met where the curve reaches it",
    "threshold_units": "units of the threshold",
    "horizon": "the limit; empty unless the status is reached",
    "low": "lower end of the interval of the horizon; empty where there is none",
    "high": "upper end; empty where there is none, or where it lies beyond the run "
    "(then low is given and high is not)",
    "horizon_units": "units of horizon, low, high, projected and doubling_time",
    "status": "reached, beyond_run, at_start, no_growth or no_data",
    "projected": "where the fitted law places a limit that the run did not reach: an "
    "extrapolation, never mixed with horizon",
    "doubling_time": "time in which a small spread doubles under the fitted law",
    "law": "the law of growth that was fitted; none where there was no fit",
    "members": "ensemble members used",
}

_WITH_NUMBER = (Status.reached, Status.at_start)
_ORDER = {
    Status.at_start: 0,
    Status.reached: 1,
    Status.beyond_run: 2,
    Status.no_growth: 3,
    Status.no_data: 4,
}
_STYLE = {Status.at_start: "bold red", Status.reached: "bold", Status.beyond_run: "green"}


def write_horizon_table(path: str | os.PathLike[str], results: Iterable[VariableResult]) -> Path:
    """Write ``horizons.csv``: one row per start, variable, place and criterion.

    UTF-8, comma separated, quoted where needed, the header in the first line. A cell is empty where
    there is no number; `COLUMN_NOTES` describes every column.

    Parameters
    ----------
    path : path
        The file to write.
    results : iterable of objects with ``curves``
        One per variable.

    Raises
    ------
    ProductError
        If the file cannot be written; nothing half-written stays behind.
    """
    return write_rows(path, COLUMNS, [table_row(limit) for limit in limits(results)])


def table_row(limit: Limit) -> list[str]:
    """Return the cells of one limit in the order of `COLUMNS`."""
    horizon = limit.horizon if limit.status in _WITH_NUMBER else np.nan
    return [
        limit.start,
        limit.variable,
        limit.place,
        limit.criterion,
        cell(limit.threshold),
        limit.threshold_units,
        cell(horizon),
        cell(limit.low),
        cell(limit.high),
        limit.horizon_units,
        limit.status.name,
        cell(limit.projected),
        cell(limit.doubling_time),
        limit.law,
        "" if limit.members is None else str(limit.members),
    ]


def limits_table(results: Iterable[VariableResult], *, most: int | None = None) -> Table:
    """Return the limits as a table for the terminal, the shortest first, the caution below.

    Parameters
    ----------
    results : iterable of objects with ``curves``
        One per variable.
    most : int, optional
        Show no more rows than this, and say how many were left out.

    Returns
    -------
    rich.table.Table
    """
    rows = sorted(limits(results), key=shortest_first)
    shown = rows if most is None else rows[:most]
    several = len({row.start for row in rows}) > 1
    starts = "" if several or not rows else f", start {rows[0].start_text}"
    note = "" if len(shown) == len(rows) else f"{len(rows) - len(shown)} longer limits not shown.\n"
    table = Table(
        title=f"Lead-time limits, shortest first{starts}",
        caption=Text(note + CAUTION, style="italic"),
        caption_justify="left",
        title_justify="left",
        box=box.SIMPLE_HEAD,
    )
    if several:
        table.add_column("start", no_wrap=True)
    for heading in ("place", "variable", "criterion"):
        table.add_column(heading, overflow="fold")
    table.add_column("horizon", overflow="fold", min_width=16)
    table.add_column("doubling time", justify="right")
    table.add_column("law")
    table.add_column("members", justify="right")
    for row in shown:
        # Text objects, because names from the settings may hold square brackets.
        cells = [
            Text(row.place),
            Text(row.variable),
            Text(criterion_text(row)),
            Text(row.text, style=_STYLE.get(row.status, "")),
            Text(duration(row.doubling_time, row.horizon_units)),
            Text({"none": "no fit", "": "–"}.get(row.law, row.law)),
            Text("–" if row.members is None else str(row.members)),
        ]
        table.add_row(*([Text(row.start_text)] if several else []), *cells)
    return table


def criterion_text(limit: Limit) -> str:
    """Return a criterion with its threshold: ``gale (5 m s-1)``; no units where dimensionless."""
    name, threshold = criterion_parts(limit)
    return f"{name} ({threshold})" if threshold else name


def criterion_parts(limit: Limit) -> tuple[str, str]:
    """Return a criterion and its threshold; the latter is empty where the former says it all.

    A chance is told in words, and takes the place of a name that was made from its numbers.
    """
    if limit.criterion_kind == "chance":
        words = rule_words(limit.rule, limit.units)
        if words:
            return (words, "") if limit.criterion == limit.rule else (limit.criterion, words)
    if limit.criterion_kind.endswith("fraction") and limit.threshold_units not in ("", "1"):
        # The number in the name is the fraction, whatever the threshold happens to be.
        if not np.isfinite(limit.threshold):
            return limit.criterion, "threshold not known"
        return limit.criterion, f"{number(limit.threshold)} {limit.threshold_units}"
    words = criterion_words(limit.criterion, limit.threshold, limit.threshold_units)
    behind = words.removeprefix(limit.criterion)
    if behind.startswith(" (") and words.startswith(limit.criterion):
        return limit.criterion, behind[2:-1]
    return words, ""


def shortest_first(limit: Limit) -> tuple[int, float, str, str]:
    """Return what limits are sorted by where the shortest comes first."""
    length = limit.projected if limit.status == Status.beyond_run else limit.horizon
    return (
        _ORDER[limit.status],
        length if np.isfinite(length) else np.inf,
        limit.place,
        limit.variable,
    )
