"""Observations at sites from a CSV file: time, site, value, one row each.

Nothing is guessed: a cell without a value is no observation, a time without an offset is UTC where
all are without, and a file that mixes both, or contradicts itself, is refused.
"""

from __future__ import annotations

import csv
import math
import os
from collections.abc import Iterator, Mapping
from dataclasses import dataclass
from datetime import UTC, datetime
from pathlib import Path

from ensemble_horizon.errors import InputError
from ensemble_horizon.runs.times import date_ticks

_NO_VALUE = ("", "na", "nan", "null", "none", "-")


@dataclass(frozen=True)
class Observations:
    """Observed values by site and time.

    Parameters
    ----------
    values : mapping of site to mapping of ticks (microseconds since 1970, UTC) to value
    rows : int
        Rows of the file.
    empty : int
        Rows without a value.
    with_offset : bool
        Whether times were given with an offset from UTC, and converted.
    """

    values: Mapping[str, Mapping[int, float]]
    rows: int
    empty: int
    with_offset: bool


def read_observations(
    path: str | os.PathLike[str], *, time: str = "time", site: str = "site", value: str = "value"
) -> Observations:
    """Read a CSV file of observations.

    Parameters
    ----------
    path : path
        UTF-8, comma separated, the names of the columns in the first line.
    time, site, value : str
        Names of the columns. Times are ISO 8601, all with an offset from UTC (``Z``, ``+02:00``),
        from which they are converted, or all without, which is taken as UTC.

    Raises
    ------
    InputError
        if the file cannot be read, lacks a column, holds a time or value that is none, mixes times
        with and without offset, or gives one site two values at one time.

    Examples
    --------
    >>> import pathlib, tempfile
    >>> path = pathlib.Path(tempfile.mkdtemp()) / "mast.csv"
    >>> _ = path.write_text("time,site,value\\n1970-01-01T02:00+02:00,Quay,7.5\\n")
    >>> read_observations(path).values
    {'Quay': {0: 7.5}}
    """
    name = os.fspath(path)
    found: dict[str, dict[int, float]] = {}
    rows = empty = 0
    first: bool | None = None
    for line, (when, place, text) in _cells(name, (time, site, value)):
        rows += 1
        moment = _moment(name, line, when)
        offset = moment.tzinfo is not None
        first = offset if first is None else first
        if offset != first:
            raise InputError(
                f"{name}, line {line}",
                expected="times that all have an offset from UTC, or all none",
                found=f"{when!r}, {'with' if offset else 'without'} one, unlike those before",
                remedy="write all times with their offset, for instance 2031-02-14T06:00Z",
            )
        if text.strip().lower() in _NO_VALUE:
            empty += 1
            continue
        number = _number(name, line, text)
        tick = date_ticks(moment.astimezone(UTC) if offset else moment)
        known = found.setdefault(place, {}).setdefault(tick, number)
        if known != number:
            raise InputError(
                f"{name}, line {line}",
                expected=f"one value for {place!r} at {when}",
                found=f"{known:g} and {number:g}",
                remedy="remove the wrong one",
            )
    if not found:
        raise InputError(
            name,
            expected="at least one observation",
            found=f"{rows} rows, none with a value",
            remedy="check the file, or take it out of the settings",
        )
    return Observations(found, rows, empty, bool(first))


def _cells(name: str, columns: tuple[str, str, str]) -> Iterator[tuple[int, tuple[str, ...]]]:
    """Line number and the three cells of every row."""
    try:
        with Path(name).open(encoding="utf-8-sig", newline="") as stream:
            table = csv.DictReader(stream)
            there = [cell.strip() for cell in table.fieldnames or []]
            table.fieldnames = there
            missing = [column for column in columns if column not in there]
            if missing:
                raise InputError(
                    name,
                    expected=f"columns {', '.join(columns)} in the first line",
                    found=", ".join(there) or "an empty file",
                    remedy=f"rename the columns, or name {', '.join(missing)} in the settings",
                )
            for row in table:
                if None in row or None in row.values():
                    raise InputError(
                        f"{name}, line {table.line_num}",
                        expected=f"{len(there)} cells, as in the first line",
                        found="more" if None in row else "fewer",
                        remedy="write decimal points, and put texts with commas in quotes",
                    )
                yield table.line_num, tuple(row[column].strip() for column in columns)
    except OSError as error:
        raise InputError(
            name,
            expected="a CSV file of observations that can be read",
            found=error.strerror or str(error),
            remedy="check the path",
        ) from error
    except (UnicodeDecodeError, csv.Error) as error:
        raise InputError(
            name,
            expected="a CSV file in UTF-8",
            found=str(error),
            remedy="save it as comma-separated UTF-8",
        ) from error


def _moment(name: str, line: int, text: str) -> datetime:
    try:
        return datetime.fromisoformat(text)
    except ValueError:
        raise InputError(
            f"{name}, line {line}",
            expected="a time in ISO 8601, for instance 2031-02-14T06:00Z",
            found=repr(text),
            remedy="correct the time",
        ) from None


def _number(name: str, line: int, text: str) -> float:
    try:
        number = float(text)
    except ValueError:
        number = math.nan
    if not math.isfinite(number):
        raise InputError(
            f"{name}, line {line}",
            expected="a number, or an empty cell where there is none",
            found=repr(text),
            remedy="correct the value; numbers have a decimal point",
        )
    return number
