"""The part of ``versions.nc`` that tells how two versions scored: differences by lead and place."""

from __future__ import annotations

from typing import Any

import netCDF4
import numpy as np
import xarray as xr

from ensemble_horizon.products.netcdf import is_unit, lead_attributes, put, valid_name
from ensemble_horizon.serial import REASON_ATTRIBUTES
from ensemble_horizon.vocabulary import LEAD, PLACE, SCORE

# Ending of the name in the file, and what it is; those in the units of the score come first.
_FIELDS = {
    "difference": ("difference", "{b} less {a}, start by start: {score}"),
    "difference_low": ("difference_low", "lower end of the interval of {b} less {a}: {score}"),
    "difference_high": ("difference_high", "upper end of the interval of {b} less {a}: {score}"),
    "mean_a": ("a", "{score} of {a}"),
    "mean_b": ("b", "{score} of {b}"),
    "p_value": ("p_value", "p-value against no difference: {score}"),
    "adjusted_p_value": (
        "adjusted_p_value", "p-value adjusted for the false discovery rate: {score}",
    ),
    "starts": ("starts", "starts at which both have a value: {score}"),
    "reason": ("reason", "why there is an interval and a p-value, or none: {score}"),
    "survives": ("survives", "whether the versions are told apart: {score}"),
}  # fmt: skip
_SIZED = ("difference", "difference_low", "difference_high", "mean_a", "mean_b")
_FLAGS = {
    "reason": {key: REASON_ATTRIBUTES[key] for key in ("flag_values", "flag_meanings")},
    "survives": {"flag_values": [0, 1], "flag_meanings": "no yes"},
}
_BESIDE = ("difference_low", "difference_high", "p_value", "adjusted_p_value", "survives", "reason")


def put_score_leads(file: netCDF4.Dataset, lead: xr.DataArray) -> None:
    """Write the leads that all differences of scores share."""
    file.createDimension(LEAD, lead.size)
    put(file, LEAD, (LEAD,), lead.values.astype(float), lead_attributes(lead))


def put_differences(file: netCDF4.Dataset, part: xr.Dataset, prefix: str, taken: set[str]) -> None:
    """Write the differences of one variable: ``t2_crps_difference(t2_scored_place, lead)``.

    Parameters
    ----------
    file : open for writing, with the leads in it
    part : Dataset (score, lead, place)
    prefix : str, name of the variable in the file
    taken : set of str
        Names in use; those of the scores join it.
    """
    places = valid_name(f"{prefix}_scored_place", taken)
    file.createDimension(places, part.sizes[PLACE])
    put(file, f"{places}_name", (places,), part[PLACE].values.astype(str),
        {"long_name": "region or site"})  # fmt: skip
    put(file, f"{places}_against", (places,), part["against"].values.astype(str),
        {"long_name": "what the forecasts are held against"})  # fmt: skip
    near = f"{places}_name {places}_against"
    for row, score in enumerate(part[SCORE].values):
        one = part.isel({SCORE: row}).transpose(PLACE, LEAD)
        name = valid_name(f"{prefix}_{score}", taken)
        words = {
            "a": str(part.attrs["version_a"]),
            "b": str(part.attrs["version_b"]),
            "score": f"{one['score_text'].values}: {part.attrs['long_name']}",
        }
        for key, (ending, text) in _FIELDS.items():
            attributes: dict[str, Any] = {"long_name": text.format(**words), "coordinates": near}
            values = one[key].values
            if key in _FLAGS:
                flags = _FLAGS[key]
                attributes["flag_values"] = np.asarray(flags["flag_values"], dtype=np.int8)
                attributes["flag_meanings"] = str(flags["flag_meanings"])
                values = values.astype(np.int8)
            else:
                units = str(one["score_units"].values) if key in _SIZED else "1"
                attributes["units" if is_unit(units) else "units_as_given"] = units
            if key == "starts":
                values = values.astype(np.int32)
            if key == "difference":
                beside = (f"{name}_{_FIELDS[other][0]}" for other in _BESIDE)
                attributes["ancillary_variables"] = " ".join(beside)
            put(file, f"{name}_{ending}", (places, LEAD), values, attributes)
