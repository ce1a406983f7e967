"""``score_differences.csv`` for programs, and a table of differences for the terminal."""

from __future__ import annotations

import os
from collections.abc import Iterable, Iterator, Sequence
from itertools import product
from pathlib import Path

import numpy as np
import xarray as xr
from rich import box
from rich.table import Table
from rich.text import Text

from ensemble_horizon.products.rows import cell, write_rows
from ensemble_horizon.products.wording import number
from ensemble_horizon.serial import REASON_ATTRIBUTES
from ensemble_horizon.vocabulary import LEAD, PLACE, SCORE

DIFFERENCE_COLUMNS = {
    "variable": "name of the variable in the settings of a",
    "place": "region or site",
    "against": "analysis or observation",
    "score": "crps (fair CRPS) or squared_error (of the mean of as many members in both); both are "
    "better when small",
    "lead": "lead time",
    "lead_units": "units of lead",
    "starts": "common starts at which both have a value",
    "a": "mean over those starts of version a",
    "b": "the same of version b",
    "difference": "b less a, start by start: below zero where b errs less",
    "low": "lower end of its interval, successive starts not taken as independent",
    "high": "upper end",
    "p_value": "against no difference, each lead by itself",
    "adjusted_p_value": "the same for the number of rows (false discovery rate)",
    "survives": "yes where adjusted_p_value is at most 0.1",
    "units": "units of a, b, difference, low and high",
    "reason": "given, or why there is no interval",
}
_REASONS = str(REASON_ATTRIBUTES["flag_meanings"]).split()
_ENDS = ("difference_low", "difference_high")


def write_difference_table(path: str | os.PathLike[str], parts: Iterable[xr.Dataset]) -> Path:
    """Write one row per variable, place, score and lead.

    Raises
    ------
    ProductError
        If the file cannot be written; nothing half-written stays behind.
    """
    return write_rows(path, DIFFERENCE_COLUMNS, (row for part in parts for row in _rows(part)))


def _rows(part: xr.Dataset) -> Iterator[list[str]]:
    sizes = (part.sizes[dim] for dim in (PLACE, SCORE, LEAD))
    for place, score, lead in product(*map(range, sizes)):
        yield _cells(part.isel({PLACE: place, SCORE: score, LEAD: lead}), part)


def difference_table(parts: Sequence[xr.Dataset]) -> Table:
    """Return the CRPS of both versions at some leads as a table for the terminal."""
    about = parts[0].attrs
    table = Table(
        title=Text(f"CRPS of {about['version_b']} less that of {about['version_a']}"),
        caption=Text(
            f"Above zero {about['version_b']} errs more. Each lead is judged by itself.",
            style="italic",
        ),
        title_justify="left",
        caption_justify="left",
        box=box.SIMPLE_HEAD,
    )
    for heading in ("place", "variable", "against"):
        table.add_column(heading, overflow="fold")
    table.add_column("lead", justify="right")
    for label in (about["version_a"], about["version_b"]):
        table.add_column(Text(str(label)), justify="right")
    table.add_column("difference", no_wrap=True)
    for part in parts:
        data = part.sel({SCORE: "crps"})
        positions = np.unique(np.linspace(0, part.sizes[LEAD] - 1, 4).round().astype(int))
        for row in range(part.sizes[PLACE]):
            for position in positions[1:] if positions.size > 1 else positions:
                one = data.isel({PLACE: row, LEAD: int(position)})
                cells = [
                    str(one[PLACE].values), str(part.attrs["variable"]), str(one["against"].values),
                    f"{float(one[LEAD]):g} {part.attrs['lead_units']}",
                    *(_shown(float(one[name])) for name in ("mean_a", "mean_b")), _words(one),
                ]  # fmt: skip
                table.add_row(*(Text(cell) for cell in cells))
    return table


def _words(one: xr.Dataset) -> str:
    ends = [float(one[end]) for end in _ENDS]
    words = _shown(float(one["difference"]), sign=True)
    if np.isfinite(ends).all():
        words += f" ({_shown(ends[0], sign=True)} to {_shown(ends[1], sign=True)})"
    return words


def _cells(one: xr.Dataset, part: xr.Dataset) -> list[str]:
    return [
        str(part.attrs["variable"]), str(one[PLACE].values), str(one["against"].values),
        str(one[SCORE].values), cell(float(one[LEAD])), str(part.attrs["lead_units"]),
        str(int(one["starts"])),
        *(cell(float(one[name])) for name in ("mean_a", "mean_b", "difference")),
        *(cell(float(one[name])) for name in (*_ENDS, "p_value", "adjusted_p_value")),
        ("yes" if one["survives"] else "no") if np.isfinite(one["adjusted_p_value"]) else "",
        str(one["score_units"].values), _REASONS[int(one["reason"])],
    ]  # fmt: skip


def _shown(value: float, sign: bool = False) -> str:
    if not np.isfinite(value):
        return "–"
    mark = ("+" if value > 0 else "−" if value < 0 else "") if sign else ""
    return mark + number(abs(value) if sign else value)
