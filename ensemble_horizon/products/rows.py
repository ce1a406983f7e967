"""Rows of a table written as CSV for programs."""

from __future__ import annotations

import csv
import os
from collections.abc import Iterable
from pathlib import Path
from typing import SupportsFloat

import numpy as np

from ensemble_horizon.products.writing import written_whole


def write_rows(
    path: str | os.PathLike[str], columns: Iterable[str], rows: Iterable[list[str]]
) -> Path:
    """Write a heading and rows, comma-separated, lines ending in a line feed.

    Raises
    ------
    ProductError
        If the file cannot be written; nothing half-written stays behind.
    """
    target = Path(path)
    with (
        written_whole(target) as neighbour,
        neighbour.open("w", encoding="utf-8", newline="") as stream,
    ):
        writer = csv.writer(stream, lineterminator="\n")
        writer.writerow(columns)
        writer.writerows(rows)
    return target


def cell(value: SupportsFloat) -> str:
    """Return a number to six digits, empty where there is none.

    Examples
    --------
    >>> cell(2.5), cell(float("nan"))
    ('2.5', '')
    """
    number = float(value)
    return f"{number:.6g}" if np.isfinite(number) else ""
