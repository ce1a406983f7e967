"""How two versions compare, read from the folder that a comparison wrote."""

from __future__ import annotations

import csv
import os
from collections.abc import Callable, Mapping
from dataclasses import dataclass, replace
from pathlib import Path
from typing import TypeVar

import netCDF4

from ensemble_horizon.errors import InputError
from ensemble_horizon.products.gains import Gain, summary_words
from ensemble_horizon.products.gains_table import COLUMNS
from ensemble_horizon.products.page.error_rows import ErrorRow, error_row, outcome
from ensemble_horizon.products.wording import rule_words, start_text, with_units

SCORES = "score_differences.csv"
_SCORE_COLUMNS = (
    "variable", "place", "against", "score", "lead", "lead_units", "starts", "a", "b",
    "difference", "low", "high", "survives", "units",
)  # fmt: skip
_OF_SPREAD = (
    "limits rest on the spread of the members, not on errors: a version whose members part too "
    "slowly gains hours that it does not deserve"
)
_Row = TypeVar("_Row")


@dataclass(frozen=True)
class VersionsTable:
    """Hours gained by version b over version a.

    Attributes
    ----------
    version_a, version_b : str
        Names of the versions.
    starts : str
        How many starts were compared, and from when to when.
    rows : tuple of Gain
        In the order of the file, at least one.
    cautions : str
        What to hold against the gains, as the comparison says it.
    errors : tuple of ErrorRow
        Fair CRPS of both versions by place and lead; empty where neither was verified.
    inputs : (str, str)
        A file of the runs of each version; empty where that is not known.
    tonight : str
        The version that tonight's runs are of; empty where that is not known.
    """

    version_a: str
    version_b: str
    starts: str
    rows: tuple[Gain, ...]
    cautions: str = _OF_SPREAD
    errors: tuple[ErrorRow, ...] = ()
    inputs: tuple[str, str] = ("", "")
    tonight: str = ""

    def balance(self) -> str:
        """Say in one sentence which version holds longer and which errs less."""
        told = outcome(self.errors, self.version_a, self.version_b)
        held = summary_words(self.rows).rstrip(".")
        return f"{held}, but to hold longer is not to err less: {told[0].lower()}{told[1:]}."


def read_versions(folder: str | os.PathLike[str]) -> VersionsTable:
    """Read what a comparison found: hours gained, and which version errs less.

    From ``versions.csv``, ``score_differences.csv`` where it stands, and names and cautions from
    ``versions.nc``.

    Parameters
    ----------
    folder : path
        The products folder of ``compare``.

    Raises
    ------
    InputError
        If a file is missing, broken, or holds no row.
    """
    place = Path(folder)
    about = _attributes(place / "versions.nc")
    names = (about["version_a"], about["version_b"])
    rows = _rows(place / "versions.csv", COLUMNS, lambda line: _gain(line, names))
    errors: tuple[ErrorRow, ...] = ()
    if (place / SCORES).exists():
        scores = _rows(place / SCORES, _SCORE_COLUMNS, error_row)
        errors = tuple(row for row in scores if row.score == "crps")
    units = {row.variable: row.units for row in errors}
    rows = tuple(replace(row, criterion_text=_sized(row, units)) for row in rows)
    first, last = (start_text(about[key], about[key]) for key in ("first_start", "last_start"))
    starts = f"{about['start_count']} common starts, {first} to {last}"
    files = about.get("inputs", "").split(", ")
    inputs = (files[0], files[-1]) if len(files) > 1 else ("", "")
    cautions = about.get("cautions") or _OF_SPREAD
    return VersionsTable(*names, starts, rows, cautions, errors, inputs)


def _rows(
    path: Path, columns: tuple[str, ...], read: Callable[[dict[str, str]], _Row]
) -> tuple[_Row, ...]:
    """Read every line of a table."""
    try:
        with path.open(encoding="utf-8", newline="") as stream:
            reader = csv.DictReader(stream, strict=True)
            lines = list(reader)
            missing = [name for name in columns if name not in (reader.fieldnames or ())]
        if missing:
            raise ValueError(f"no column {missing[0]}")
        rows = tuple(read(line) for line in lines)
        if not rows:
            raise ValueError("no row")
    except (OSError, UnicodeError, ValueError, TypeError, csv.Error) as error:
        raise _unreadable(path, error) from error
    return rows


def _sized(row: Gain, units: Mapping[str, str]) -> str:
    """The criterion with units, where its name says its size and the units are known."""
    if row.variable not in units:
        return row.criterion
    if row.criterion.startswith("tolerance "):
        return with_units(row.criterion, units[row.variable])
    return rule_words(row.criterion, units[row.variable]) or row.criterion


def _attributes(path: Path) -> dict[str, str]:
    wanted = ("version_a", "version_b", "first_start", "last_start", "start_count")
    try:
        with netCDF4.Dataset(path) as file:
            known = [name for name in ("inputs", "cautions") if name in file.ncattrs()]
            return {name: str(file.getncattr(name)) for name in (*wanted, *known)}
    except (OSError, RuntimeError, AttributeError) as error:
        raise _unreadable(path, error) from error


def _unreadable(path: Path, error: Exception) -> InputError:
    missing = not path.exists()
    return InputError(
        str(path),
        expected="the file as `compare` writes it",
        found="no such file" if missing else str(error) or type(error).__name__,
        remedy="run `compare` into that folder, or name the folder it wrote",
    )


def _gain(line: dict[str, str], names: tuple[str, str]) -> Gain:
    def value(column: str) -> float:
        return float(line[column] or "nan")

    return Gain(
        variable=line["variable"],
        long_name=line["variable"],
        place=line["place"],
        kind=line["kind"],
        criterion=line["criterion"],
        criterion_text=line["criterion"],
        starts=int(line["starts"]),
        horizon_a=value("horizon_a"),
        horizon_b=value("horizon_b"),
        gained=value("hours_gained"),
        low=value("low"),
        high=value("high"),
        p_value=value("p_value"),
        adjusted_p_value=value("adjusted_p_value"),
        survives=line["survives"] == "yes",
        log_rank_p=value("log_rank_p"),
        beyond_a=int(line["beyond_a"]),
        beyond_b=int(line["beyond_b"]),
        counted_to=value("counted_to"),
        units=line["units"],
        reason=line["reason"],
        version_a=names[0],
        version_b=names[1],
    )
