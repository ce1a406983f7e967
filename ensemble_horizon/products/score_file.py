"""``scores.nc`` and ``score_maps.nc``: scores by lead, ranks and skill limits (CF-1.11)."""

from __future__ import annotations

import os
from collections.abc import Mapping, Sequence
from pathlib import Path
from typing import Any

import netCDF4
import numpy as np
import xarray as xr

from ensemble_horizon.products.map_grid import FileGrids
from ensemble_horizon.products.netcdf import (
    global_attributes,
    is_unit,
    lead_attributes,
    open_new,
    put,
    valid_name,
    verify_file,
)
from ensemble_horizon.products.scores import ScoredVariable
from ensemble_horizon.products.writing import written_whole
from ensemble_horizon.vocabulary import (
    LATITUDE,
    LEAD,
    LIMIT,
    LONGITUDE,
    PLACE,
    RANK,
    SCORE,
    STATUS_ATTRIBUTES,
)

TITLE = "Scores of ensemble forecasts against analyses and observations"
_ENDS = {
    "value": ("", ""),
    "low": ("_low", "lower end of the interval of the "),
    "high": ("_high", "upper end of the interval of the "),
    "block_low": ("_block_low", "lower end of the interval, by resampled blocks, of the "),
    "block_high": ("_block_high", "upper end of the interval, by resampled blocks, of the "),
    "block_length": ("_block_length", "mean length in starts of the resampled blocks for the "),
}
_LIMIT_TEXTS = {
    "horizon": "lead at which the score falls to its level",
    "horizon_low": "lower end of the interval of the horizon",
    "horizon_high": "upper end of the interval of the horizon, infinite beyond the run",
    "significant_until": "lead up to which the score is significantly above its level",
    "gap": "time without a score within which the horizon lies",
}


def write_score_file(
    path: str | os.PathLike[str],
    results: Sequence[ScoredVariable],
    provenance: Mapping[str, Any],
) -> Path:
    """Write ``scores.nc``.

    Every field carries the names of its variable and score, such as ``t2_rmse(t2_place, lead)``
    with ``t2_rmse_low`` and ``t2_rmse_high``. Ranks are ``t2_rank_share(t2_place, lead,
    t2_rank)``, with the p-value of flat ranks, ``t2_rank_p_value``; limits are
    ``t2_horizon(t2_limit, t2_place)``.

    Raises
    ------
    ProductError
        If the file cannot be written; nothing half-written stays behind.
    """
    target = Path(path)
    lead = results[0].places[LEAD]
    with written_whole(target) as neighbour:
        with open_new(neighbour) as file:
            file.setncatts(global_attributes(TITLE, provenance))
            _put_lead(file, lead)
            taken = {LEAD}
            for result in results:
                _put_places(file, result.places, valid_name(result.places.attrs["variable"], taken))
        verify_file(neighbour, {LEAD: lead.size})
    return target


def write_score_maps(
    path: str | os.PathLike[str], maps: Sequence[xr.Dataset], provenance: Mapping[str, Any]
) -> Path:
    """Write ``score_maps.nc``: ``t2_rmse(lead, latitude, longitude)``, limits without the lead.

    Raises
    ------
    ProductError
        If the file cannot be written; nothing half-written stays behind.
    """
    target = Path(path)
    lead = maps[0][LEAD]
    with written_whole(target) as neighbour:
        with open_new(neighbour) as file:
            file.setncatts(global_attributes(f"{TITLE}, per grid point", provenance))
            _put_lead(file, lead)
            taken = {LEAD}
            grids = FileGrids(file, taken)
            for one in maps:
                _put_maps(file, one, valid_name(one.attrs["variable"], taken), grids)
        verify_file(neighbour, {LEAD: lead.size})
    return target


def _put_lead(file: netCDF4.Dataset, lead: xr.DataArray) -> None:
    file.createDimension(LEAD, lead.size)
    put(file, LEAD, (LEAD,), lead.values.astype(float), lead_attributes(lead))


def _put_places(file: netCDF4.Dataset, data: xr.Dataset, prefix: str) -> None:
    names = {key: f"{prefix}_{key}" for key in (PLACE, RANK)}
    for key, name in names.items():
        file.createDimension(name, data.sizes[key])
    put(file, f"{names[PLACE]}_name", (names[PLACE],), data[PLACE].values.astype(str),
        {"long_name": "region or site"})  # fmt: skip
    put(file, f"{prefix}_against", (names[PLACE],), data["against"].values.astype(str),
        {"long_name": "what the forecasts are held against"})  # fmt: skip
    put(file, names[RANK], (names[RANK],), np.arange(data.sizes[RANK], dtype=np.int32),
        {"long_name": "members below the analysis", "units": "1"})  # fmt: skip
    near = {"coordinates": f"{names[PLACE]}_name {prefix}_against"}
    about = data.attrs["long_name"]
    for row, score in enumerate(data[SCORE].values):
        one = data.isel({SCORE: row})
        units = str(one["score_units"].values)
        text = f"{one['score_text'].values}: {about}"
        for key, (ending, end) in _ENDS.items():
            if key not in one:
                continue
            values = one[key].transpose(PLACE, LEAD).values
            own = "1" if key == "block_length" else units
            attributes = _with_units({"long_name": f"{end}{text}", **near}, own)
            put(file, f"{prefix}_{score}{ending}", (names[PLACE], LEAD), values, attributes)
        count = {"long_name": f"starts that have data for the {text}", "units": "1", **near}
        values = one["starts"].transpose(PLACE, LEAD).values.astype(np.int32)
        put(file, f"{prefix}_{score}_starts", (names[PLACE], LEAD), values, count)
    put(file, f"{prefix}_rank_share", (names[PLACE], LEAD, names[RANK]),
        data["rank_share"].transpose(PLACE, LEAD, RANK).values,
        {"long_name": f"share of analyses by rank among the members: {about}", "units": "1",
         **near})  # fmt: skip
    put(file, f"{prefix}_rank_p_value", (names[PLACE], LEAD),
        data["rank_p_value"].transpose(PLACE, LEAD).values,
        {"long_name": f"p-value of flat ranks: {about}", "units": "1", **near})  # fmt: skip
    if data.sizes[LIMIT]:
        _put_limits(file, data, prefix, (PLACE,), (names[PLACE],), near["coordinates"])


def _put_maps(file: netCDF4.Dataset, data: xr.Dataset, prefix: str, grids: FileGrids) -> None:
    space = tuple(str(name) for name in data["bias"].dims if name != LEAD)
    names = grids.names(data, space)
    dimensions = tuple(names[key] for key in space)
    near = " ".join(
        names[key] for key in (LATITUDE, LONGITUDE) if key in names and key not in space
    )
    for name, field in data.data_vars.items():
        if LEAD not in field.dims:
            continue
        text = f"{field.attrs['long_name']}: {data.attrs['long_name']}"
        attributes = _with_units({"long_name": text}, str(field.attrs["units"]))
        attributes["coordinates"] = near or None
        chunks = (1, *(data.sizes[key] for key in space))
        values = field.transpose(LEAD, *space).values
        put(file, f"{prefix}_{name}", (LEAD, *dimensions), values, attributes, chunks=chunks)
    if data.sizes[LIMIT]:
        _put_limits(file, data, prefix, space, dimensions, near)


def _put_limits(
    file: netCDF4.Dataset,
    data: xr.Dataset,
    prefix: str,
    dims: tuple[str, ...],
    dimensions: tuple[str, ...],
    near: str,
) -> None:
    limit = f"{prefix}_{LIMIT}"
    file.createDimension(limit, data.sizes[LIMIT])
    put(file, f"{limit}_name", (limit,), data[LIMIT].values.astype(str),
        {"long_name": "score that falls to a level"})  # fmt: skip
    put(file, f"{limit}_level", (limit,), data["level"].values.astype(float),
        {"long_name": "level that the score falls to", "units": "1"})  # fmt: skip
    coordinates = f"{near} {limit}_name {limit}_level".strip()
    about = data.attrs["long_name"]
    for name, text in _LIMIT_TEXTS.items():
        attributes = {
            "long_name": f"{text}: {about}", "units": str(data.attrs["lead_units"]),
            "coordinates": coordinates,
        }  # fmt: skip
        flag = "significant_status" if name == "significant_until" else "status"
        if name in ("horizon", "significant_until"):
            attributes["ancillary_variables"] = f"{prefix}_{flag}"
        values = data[name].transpose(LIMIT, *dims).values
        put(file, f"{prefix}_{name}", (limit, *dimensions), values, attributes)
    for name in ("status", "significant_status"):
        flags: dict[str, Any] = {
            "long_name": f"{name.replace('_', ' ')} of the lead: {about}",
            "flag_values": np.asarray(STATUS_ATTRIBUTES["flag_values"], dtype=np.int8),
            "flag_meanings": STATUS_ATTRIBUTES["flag_meanings"],
            "coordinates": coordinates,
        }
        values = data[name].transpose(LIMIT, *dims).values.astype(np.int8)
        put(file, f"{prefix}_{name}", (limit, *dimensions), values, flags)


def _with_units(attributes: dict[str, Any], units: str) -> dict[str, Any]:
    key = "units" if is_unit(units) else "units_as_given"
    return {**attributes, key: units}
