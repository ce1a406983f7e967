"""How two versions compare, read from the folder that a comparison wrote."""

from __future__ import annotations

import csv
import os
from dataclasses import dataclass
from pathlib import Path

import netCDF4

from ensemble_horizon.errors import InputError
from ensemble_horizon.products.gains import Gain
from ensemble_horizon.products.gains_table import COLUMNS
from ensemble_horizon.products.wording import start_text


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
    """

    version_a: str
    version_b: str
    starts: str
    rows: tuple[Gain, ...]


def read_versions(folder: str | os.PathLike[str]) -> VersionsTable:
    """Read ``versions.csv`` of a comparison, and the names of the versions from ``versions.nc``.

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
    path = place / "versions.csv"
    try:
        with path.open(encoding="utf-8", newline="") as stream:
            reader = csv.DictReader(stream, strict=True)
            lines = list(reader)
            missing = [name for name in COLUMNS if name not in (reader.fieldnames or ())]
        if missing:
            raise ValueError(f"no column {missing[0]}")
        rows = tuple(_gain(line, names) for line in lines)
        if not rows:
            raise ValueError("no row")
    except (OSError, UnicodeError, ValueError, TypeError, csv.Error) as error:
        raise _unreadable(path, error) from error
    first, last = (start_text(about[key], about[key]) for key in ("first_start", "last_start"))
    starts = f"{about['start_count']} common starts, {first} to {last}"
    return VersionsTable(*names, starts, rows)


def _attributes(path: Path) -> dict[str, str]:
    wanted = ("version_a", "version_b", "first_start", "last_start", "start_count")
    try:
        with netCDF4.Dataset(path) as file:
            return {name: str(file.getncattr(name)) for name in wanted}
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
