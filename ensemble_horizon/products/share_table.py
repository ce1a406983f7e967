"""``time_to_limit.csv``: when how many of many starts have met their limit."""

from __future__ import annotations

import os
from collections.abc import Iterable, Iterator
from pathlib import Path

import xarray as xr

from ensemble_horizon.products.rows import cell, write_rows
from ensemble_horizon.vocabulary import CRITERION, PLACE

_QUANTILES = {"quarter": 0.25, "half": 0.5, "three_quarters": 0.75}
_COUNTS = ("starts", "reached", "censored", "at_start", "no_data")

COLUMN_NOTES = {
    "variable": "name of the variable in the settings",
    "place": "region or site",
    "kind": "kind of place: region or site",
    "criterion": "name of the criterion in the settings",
    "starts": "starts that have data",
    "reached": "of these, with their limit within the run, after the first lead",
    "censored": "with their limit beyond the run, or without growth",
    "at_start": "with their limit at the first lead",
    "no_data": "starts left out",
    **{
        f"{name}{end}": text
        for name, words in (
            ("quarter", "a quarter"), ("half", "half"), ("three_quarters", "three quarters"),
        )
        for end, text in (
            ("", f"lead by which {words} of the starts have met their limit; empty where the "
                 "status is not reached"),
            ("_low", "lower end of its interval; empty where there is none"),
            ("_high", "upper end; empty where it lies beyond the run (then low is given)"),
            ("_status", "reached, beyond_run, at_start or no_data"),
        )
    },
    "mean": "mean horizon, each counted up to counted_to (restricted mean)",
    "mean_low": "lower end of its interval",
    "mean_high": "upper end",
    "counted_to": "end of the runs",
    "units": "units of the leads",
    "reason": "given, or why there are no intervals: few_starts (under ten), no_scatter",
}  # fmt: skip
COLUMNS = tuple(COLUMN_NOTES)


def write_share_table(path: str | os.PathLike[str], shares: Iterable[xr.Dataset]) -> Path:
    """Write ``time_to_limit.csv``: one row per variable, place and criterion.

    UTF-8, comma separated, quoted where needed; a cell is empty where there is no number.

    Parameters
    ----------
    path : path
        The file to write.
    shares : iterable of Dataset (lead, quantile, place, criterion)
        Time to the limit, one per variable.

    Raises
    ------
    ProductError
        If the file cannot be written; nothing half-written stays behind.
    """
    rows = (row for part in shares for row in _rows(part))
    return write_rows(path, COLUMNS, ([row[name] for name in COLUMNS] for row in rows))


def _rows(shares: xr.Dataset) -> Iterator[dict[str, str]]:
    statuses = str(shares["limit_status"].attrs["flag_meanings"]).split()
    reasons = str(shares["interval_reason"].attrs["flag_meanings"]).split()
    for place in range(shares.sizes[PLACE]):
        for criterion in range(shares.sizes[CRITERION]):
            one = shares.isel({PLACE: place, CRITERION: criterion})
            row = {
                "variable": str(shares.attrs["variable"]),
                "place": str(one[PLACE].values),
                "kind": str(one["place_kind"].values),
                "criterion": str(one[CRITERION].values),
                **{name: str(int(one[name])) for name in _COUNTS},
                "mean": cell(one["restricted_mean"]),
                "mean_low": cell(one["restricted_mean_low"]),
                "mean_high": cell(one["restricted_mean_high"]),
                "counted_to": cell(one["restricted_to"]),
                "units": str(shares.attrs["lead_units"]),
                "reason": reasons[int(one["interval_reason"])],
            }
            for name, part in _QUANTILES.items():
                limit = one.sel(quantile=part)
                row[name] = cell(limit["limit"])
                row[f"{name}_low"] = cell(limit["limit_low"])
                row[f"{name}_high"] = cell(limit["limit_high"])
                row[f"{name}_status"] = statuses[int(limit["limit_status"])]
            yield row
