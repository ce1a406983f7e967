"""``versions.nc``: hours gained of regions and sites, and at every grid point."""

from __future__ import annotations

import os
from collections.abc import Iterable, Mapping, Sequence
from pathlib import Path
from typing import Any

import netCDF4
import numpy as np
import xarray as xr

from ensemble_horizon.products.difference_file import put_differences, put_score_leads
from ensemble_horizon.products.gains import VersionsResult
from ensemble_horizon.products.map_grid import FileGrids
from ensemble_horizon.products.netcdf import (
    field_attributes,
    global_attributes,
    open_new,
    put,
    valid_name,
    verify_file,
)
from ensemble_horizon.products.writing import written_whole
from ensemble_horizon.vocabulary import CRITERION, LATITUDE, LEAD, LONGITUDE, PLACE

TITLE = "Lead time gained by one version of a model over another"


def write_gains_file(
    path: str | os.PathLike[str],
    results: Iterable[VersionsResult],
    provenance: Mapping[str, Any],
    notes: Mapping[str, Iterable[str]],
    scores: Sequence[xr.Dataset] = (),
) -> Path:
    """Write ``versions.nc``.

    Every field carries the name of its variable, such as ``wind_speed_gained(place,
    wind_speed_criterion)``; those of maps begin with ``wind_speed_map_``, as in
    ``wind_speed_map_gained(wind_speed_criterion, latitude, longitude)``. Places are shared by all
    variables. ``survives`` is a flag: which gains survive the control of false discoveries. Where
    there are differences of scores, they are ``wind_speed_crps_difference(wind_speed_scored_place,
    lead)`` and so on, with interval and p-value.

    Parameters
    ----------
    path : path
        The file to write.
    results : iterable of VersionsResult
        One per variable.
    provenance : mapping
        See `netcdf.global_attributes`.
    notes : mapping of heading to lines
        Become attributes.
    scores : sequence of Dataset (score, lead, place)
        Differences of scores, one per variable that has any.

    Raises
    ------
    ProductError
        If the file cannot be written; nothing half-written stays behind.
    """
    parts = list(results)
    target = Path(path)
    places = parts[0].places[PLACE].values
    with written_whole(target) as neighbour:
        with open_new(neighbour) as file:
            file.setncatts(global_attributes(TITLE, provenance))
            about = parts[0].places.attrs
            for key in ("version_a", "version_b", "first_start", "last_start"):
                file.setncattr(key, str(about[key]))
            file.setncattr("start_count", np.int32(about["start_count"]))
            for heading, lines in notes.items():
                name = valid_name(heading).lower()
                file.setncattr(name, "\n".join(lines) or "nothing")
            file.createDimension(PLACE, places.size)
            put(file, "place_name", (PLACE,), places, {"long_name": "region or site"})
            kinds = parts[0].places["place_kind"].values
            put(file, "place_kind", (PLACE,), kinds, {"long_name": "kind of place"})
            taken = {PLACE, "place_name", "place_kind", LEAD}
            grids = FileGrids(file, taken)
            prefixes = {
                str(part.places.attrs["variable"]): _put_variable(file, part, taken, grids)
                for part in parts
            }
            if scores:
                put_score_leads(file, scores[0][LEAD])
            for one in scores:
                put_differences(file, one, prefixes[str(one.attrs["variable"])], taken)
        verify_file(neighbour, {PLACE: places.size})
    return target


def _put_variable(
    file: netCDF4.Dataset, part: VersionsResult, taken: set[str], grids: FileGrids
) -> str:
    """Write the gains of one variable, and return how its name reads in the file."""
    places = part.places
    prefix = valid_name(str(places.attrs["variable"]), taken)
    on_maps = valid_name(f"{prefix}_map", taken)
    dimension = f"{prefix}_{CRITERION}"
    file.createDimension(dimension, places.sizes[CRITERION])
    about = f"criterion for {places.attrs['long_name']}"
    labels = np.array([str(label) for label in places[CRITERION].values])
    put(file, f"{dimension}_name", (dimension,), labels, {"long_name": about})
    names = {PLACE: PLACE, CRITERION: dimension}
    near = f"place_name place_kind {dimension}_name"
    _put_fields(file, places.transpose(PLACE, CRITERION), prefix, names, near)
    if part.maps is not None:
        maps = part.maps
        space = tuple(str(name) for name in maps["gained"].dims if name != CRITERION)
        of_grid = grids.names(maps, space)
        beside = [of_grid[key] for key in (LATITUDE, LONGITUDE) if key in of_grid]
        beside = [name for name in beside if name not in [of_grid[key] for key in space]]
        near = " ".join([*beside, f"{dimension}_name"])
        _put_fields(file, maps, on_maps, {**of_grid, CRITERION: dimension}, near)
    return prefix


def _put_fields(
    file: netCDF4.Dataset, part: xr.Dataset, prefix: str, names: Mapping[str, str], near: str
) -> None:
    lead_units, about = str(part.attrs["lead_units"]), str(part.attrs["long_name"])
    for key, field in part.data_vars.items():
        name, attributes = str(key), dict(field.attrs)
        values = field.values
        if name == "survives":
            attributes |= {"flag_values": [0, 1], "flag_meanings": "no yes"}
        if name in ("survives", "reason"):
            values = values.astype(np.int8)
        elif values.dtype.kind == "i":
            values = values.astype(np.int32)
        attributes = field_attributes(name, attributes, about, str(part.attrs["units"]), lead_units)
        if field.dims:
            attributes["coordinates"] = near
        if name == "gained":
            attributes["ancillary_variables"] = " ".join(
                f"{prefix}_{other}"
                for other in ("gained_low", "gained_high", "p_value", "survives", "reason")
            )
        put(
            file,
            f"{prefix}_{name}",
            tuple(names[str(dim)] for dim in field.dims),
            values,
            attributes,
        )
