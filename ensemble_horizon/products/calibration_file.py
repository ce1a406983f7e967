"""The calibration file: factors from spread to error by lead and place, written and read."""

from __future__ import annotations

import os
from collections.abc import Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import netCDF4
import numpy as np
import xarray as xr

from ensemble_horizon.errors import InputError
from ensemble_horizon.products.netcdf import global_attributes, open_new, put, valid_name
from ensemble_horizon.products.writing import written_whole
from ensemble_horizon.vocabulary import (
    CELL,
    COORDINATE_ATTRIBUTES,
    LATITUDE,
    LEAD,
    LONGITUDE,
    PLACE,
    START,
)

TITLE = "Factors from ensemble spread to forecast error"
KIND = "ensemble_horizon_calibration"
_OTHER = "lead_other"
_FIELDS = ("factor", "low", "high", "log_variance", "starts")
_NOISE = "noise_correlation"
_WHERE = {
    "box": ("south, north, west and east of a region; a site has its position twice", "degrees"),
    "mean_position": ("weighted mean of the grid points of a region on the unit sphere", "1"),
}


@dataclass(frozen=True)
class Calibration:
    """Factors of one variable.

    Parameters
    ----------
    places : Dataset (lead, place) from `calibration_factor`
        With coordinates ``box`` (place, edge) and ``mean_position`` (place, axis), where the
        places lie; a file of an earlier version has none.
    cells : Dataset (lead, cell) of coarse cells of the grid, or None
    starts : labels of the starts that the factors were found from
    """

    places: xr.Dataset
    cells: xr.Dataset | None = None
    starts: tuple[str, ...] = ()


def write_calibration_file(
    path: str | os.PathLike[str],
    calibrations: Mapping[str, Calibration],
    provenance: Mapping[str, Any],
) -> Path:
    """Write the factors of all variables, one group of the file for each.

    Parameters
    ----------
    path : path
    calibrations : mapping of variable to Calibration
    provenance : mapping
        See `netcdf.global_attributes`.

    Raises
    ------
    ProductError
        If the file cannot be written; nothing half-written stays behind.
    """
    target = Path(path)
    with written_whole(target) as neighbour, open_new(neighbour) as file:
        file.setncatts({**global_attributes(TITLE, provenance), "kind": KIND})
        taken: set[str] = set()
        for name, found in calibrations.items():
            group = file.createGroup(valid_name(name, taken))
            group.setncattr("variable", name)
            lead = found.places[LEAD]
            for dimension in (LEAD, _OTHER):
                group.createDimension(dimension, lead.size)
            units = {"long_name": "lead time", "units": str(lead.attrs.get("units", "hours"))}
            put(group, LEAD, (LEAD,), lead.values.astype(float), units)
            _put_part(group, found.places, PLACE, "")
            names = found.places[PLACE].values.astype(str)
            put(group, "place_name", (PLACE,), names, {"long_name": "region or site"})
            put(group, "against", (PLACE,), found.places["against"].values.astype(str),
                {"long_name": "what the forecasts were held against"})  # fmt: skip
            _put_where(group, found.places)
            group.createDimension(START, len(found.starts))
            put(group, "start_name", (START,), np.array(found.starts, dtype=str),
                {"long_name": "starts that the factors were found from"})  # fmt: skip
            if found.cells is not None:
                _put_part(group, found.cells, CELL, "cell_")
                for key in (LATITUDE, LONGITUDE):
                    put(group, f"cell_{key}", (CELL,), found.cells[key].values,
                        COORDINATE_ATTRIBUTES[key])  # fmt: skip
    return target


def read_calibration_file(path: str | os.PathLike[str]) -> dict[str, Calibration]:
    """Read the factors of all variables.

    Raises
    ------
    InputError
        If the file cannot be read, or is no calibration file.
    """
    name = os.fspath(path)
    try:
        with netCDF4.Dataset(name) as file:
            if "kind" not in file.ncattrs() or file.getncattr("kind") != KIND:
                raise InputError(
                    name,
                    expected="a calibration file",
                    found="another NetCDF file",
                    remedy="write one with: ensemble-horizon verify CONFIG --calibration FILE",
                )
            return {
                str(group.getncattr("variable")): _read_group(group)
                for group in file.groups.values()
            }
    except (OSError, RuntimeError, KeyError, IndexError) as error:
        raise InputError(
            name,
            expected="a calibration file that can be read",
            found=str(error),
            remedy="check calibration.file, or write it again with verify --calibration",
        ) from error


def _put_part(group: netCDF4.Group, data: xr.Dataset, dimension: str, prefix: str) -> None:
    group.createDimension(dimension, data.sizes[dimension])
    for name in _FIELDS:
        field = data[name].transpose(dimension, LEAD)
        values = field.values.astype(np.int32 if name == "starts" else float)
        put(group, f"{prefix}{name}", (dimension, LEAD), values, _kept(field))
    for name in ("starts_needed", "radius_km"):
        put(group, f"{prefix}{name}", (dimension,), data[name].values.astype(float),
            _kept(data[name]))  # fmt: skip
    put(group, f"{prefix}{_NOISE}", (LEAD, _OTHER), data[_NOISE].values, _kept(data[_NOISE]))


def _put_where(group: netCDF4.Group, places: xr.Dataset) -> None:
    for name, (text, units) in _WHERE.items():
        if name not in places.coords:
            continue
        dimension = str(places[name].dims[1])
        group.createDimension(dimension, places.sizes[dimension])
        put(group, name, (PLACE, dimension), places[name].values.astype(float),
            {"long_name": text, "units": units})  # fmt: skip


def _kept(field: xr.DataArray) -> dict[str, Any]:
    return {"long_name": field.attrs.get("long_name"), "units": field.attrs.get("units", "1")}


def _read_group(group: netCDF4.Group) -> Calibration:
    lead = np.asarray(group[LEAD][:], dtype=float)
    units = {"units": str(group[LEAD].units)}
    places = _read_part(group, PLACE, "", lead, units)
    names = np.asarray(group["place_name"][:], dtype=str)
    against = np.asarray(group["against"][:], dtype=str)
    places = places.assign_coords({PLACE: names, "against": (PLACE, against)})
    where: dict[str, Any] = {
        name: (group[name].dimensions, np.ma.filled(group[name][:], np.nan))
        for name in _WHERE
        if name in group.variables
    }
    places = places.assign_coords(where)
    starts: tuple[str, ...] = ()
    if "start_name" in group.variables:
        starts = tuple(str(name) for name in group["start_name"][:])
    if CELL not in group.dimensions:
        return Calibration(places, None, starts)
    cells = _read_part(group, CELL, "cell_", lead, units)
    middles = {
        key: (CELL, np.ma.filled(group[f"cell_{key}"][:], np.nan)) for key in (LATITUDE, LONGITUDE)
    }
    return Calibration(places, cells.assign_coords(middles), starts)


def _read_part(
    group: netCDF4.Group, dimension: str, prefix: str, lead: np.ndarray, units: dict[str, str]
) -> xr.Dataset:
    data: dict[str, Any] = {}
    for name in _FIELDS:
        values = np.ma.filled(group[f"{prefix}{name}"][:].astype(float), np.nan)
        data[name] = ((LEAD, dimension), values.T)
    noise = np.ma.filled(group[f"{prefix}{_NOISE}"][:], np.nan)
    data[_NOISE] = ((LEAD, _OTHER), noise)
    return xr.Dataset(data, coords={LEAD: (LEAD, lead, units)})
