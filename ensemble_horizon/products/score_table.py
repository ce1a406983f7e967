"""``scores.csv`` and ``skill_limits.csv`` for programs, a table of limits for the terminal."""

from __future__ import annotations

import os
from collections.abc import Iterable, Sequence
from pathlib import Path

import numpy as np
from rich import box
from rich.table import Table
from rich.text import Text

from ensemble_horizon.products.rows import cell, write_rows
from ensemble_horizon.products.scores import (
    BLOCK_COLUMNS,
    ScoredVariable,
    score_records,
    skill_limits,
)
from ensemble_horizon.products.wording import number
from ensemble_horizon.vocabulary import CAUTION, LEAD, PLACE, SCORE

SCORE_COLUMNS = {
    "variable": "name of the variable in the settings",
    "place": "region or site",
    "against": "analysis (at a site, that of its grid point) or observation",
    "lead": "lead time",
    "lead_units": "units of lead",
    "score": "name of the score; scores.nc describes each",
    "value": "the score over all starts; empty where it is not defined",
    "low": "lower end of its interval; empty where there are too few starts or no scatter",
    "high": "upper end of its interval",
    "units": "units of value, low and high",
    "starts": "starts that it rests on",
}
LIMIT_COLUMNS = {
    "variable": "name of the variable in the settings",
    "place": "region or site",
    "against": "analysis or observation",
    "score": "the score that falls",
    "level": "what it falls to",
    "horizon": "lead at which it does; empty unless the status is reached",
    "low": "lower end of the interval of the horizon",
    "high": "upper end; empty where there is none, or where it lies beyond the run "
    "(then low is given and high is not)",
    "horizon_units": "units of horizon, low, high, significant_until and gap",
    "status": "reached, beyond_run, at_start (at or below the level at the first lead) or no_data",
    "significant_until": "lead up to which the score is significantly above the level",
    "significant_status": "status of significant_until",
    "starts": "starts that it rests on",
    "gap": "time about the horizon for which there is no score, within which it may lie anywhere; "
    "empty where there is none",
}
_SHOWN = ("rmse", "spread", "spread_error_ratio", "crps")


def score_columns(results: Sequence[ScoredVariable]) -> dict[str, str]:
    """Columns of ``scores.csv``, with those of resampled blocks where there are any."""
    drawn = any(next(iter(BLOCK_COLUMNS)) in result.places for result in results)
    return SCORE_COLUMNS | (BLOCK_COLUMNS if drawn else {})


def write_score_table(path: str | os.PathLike[str], results: Sequence[ScoredVariable]) -> Path:
    """Write ``scores.csv``: one row per variable, place, score and lead.

    Raises
    ------
    ProductError
        If the file cannot be written; nothing half-written stays behind.
    """
    columns = score_columns(results)
    more = [name for name in BLOCK_COLUMNS if name in columns]
    rows = (
        [
            item.variable, item.place, item.against, cell(item.lead), item.lead_units, item.score,
            cell(item.value), cell(item.low), cell(item.high), item.units, str(item.starts),
            *(cell(getattr(item, name)) for name in more),
        ]
        for item in score_records(results)
    )  # fmt: skip
    return write_rows(path, columns, rows)


def write_limit_table(path: str | os.PathLike[str], results: Iterable[ScoredVariable]) -> Path:
    """Write ``skill_limits.csv``: one row per variable, place and score that has a limit."""
    rows = (
        [
            item.variable, item.place, item.against, item.score, cell(item.level),
            cell(item.horizon), cell(item.low), cell(item.high), item.units, item.status.name,
            cell(item.significant_until), item.significant_status.name, str(item.starts),
            cell(item.gap),
        ]
        for item in skill_limits(results)
    )  # fmt: skip
    return write_rows(path, LIMIT_COLUMNS, rows)


def skill_table(results: Sequence[ScoredVariable]) -> Table:
    """Return the skill limits as a table for the terminal, the caution below."""
    starts = max((int(result.places.attrs["starts"]) for result in results), default=0)
    table = Table(
        title=f"Skill against analyses and observations, {starts} starts",
        caption=Text(CAUTION, style="italic"),
        caption_justify="left",
        title_justify="left",
        box=box.SIMPLE_HEAD,
    )
    for heading in ("place", "variable", "against", "score"):
        table.add_column(heading, overflow="fold")
    table.add_column("falls there at", overflow="fold", min_width=16)
    table.add_column("significant until", overflow="fold")
    for item in skill_limits(results):
        cells = [
            item.place, item.variable, item.against, f"{item.text} > {item.level:g}", item.words,
            item.significant_words,
        ]  # fmt: skip
        table.add_row(*(Text(cell) for cell in cells))
    return table


def ratio_table(results: Sequence[ScoredVariable]) -> Table:
    """Return spread and error at some leads as a table for the terminal."""
    table = Table(
        title="Spread and error", title_justify="left", box=box.SIMPLE_HEAD, show_edge=False
    )
    for heading in ("place", "variable", "against"):
        table.add_column(heading, overflow="fold")
    for heading in ("lead", "RMSE", "spread", "ratio (interval)", "CRPS"):
        table.add_column(heading, justify="right")
    for result in results:
        data = result.places
        positions = np.unique(np.linspace(0, data.sizes[LEAD] - 1, 4).round().astype(int))
        for row in range(data.sizes[PLACE]):
            for position in positions[1:] if positions.size > 1 else positions:
                one = data.isel({PLACE: row, LEAD: int(position)})
                values = {name: float(one["value"].sel({SCORE: name})) for name in _SHOWN}
                ends = [
                    float(one[end].sel({SCORE: "spread_error_ratio"})) for end in ("low", "high")
                ]
                ratio = _shown(values["spread_error_ratio"])
                if np.isfinite(ends).all():
                    ratio += f" ({number(ends[0])} to {number(ends[1])})"
                cells = [
                    str(one[PLACE].values), str(data.attrs["variable"]), str(one["against"].values),
                    f"{float(one[LEAD]):g} {data.attrs['lead_units']}", _shown(values["rmse"]),
                    _shown(values["spread"]), ratio, _shown(values["crps"]),
                ]  # fmt: skip
                table.add_row(*(Text(cell) for cell in cells))
    return table


def _shown(value: float) -> str:
    return number(value) if np.isfinite(value) else "–"
