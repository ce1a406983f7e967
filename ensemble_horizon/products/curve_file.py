"""``horizons.nc``: curves, fits and limits of regions and sites, all variables in one file."""

from __future__ import annotations

import os
from collections.abc import Iterable, Mapping, Sequence
from pathlib import Path
from typing import Any

import netCDF4
import numpy as np
import xarray as xr

from ensemble_horizon.checks import require_dimension
from ensemble_horizon.errors import ArgumentError
from ensemble_horizon.products.limits import VariableResult, start_labels
from ensemble_horizon.products.netcdf import (
    encoded_starts,
    field_attributes,
    global_attributes,
    lead_attributes,
    missing_value,
    open_new,
    put,
    split_thresholds,
    verify_file,
)
from ensemble_horizon.products.origin import POOLED, note, prefix_of, put_criteria
from ensemble_horizon.products.wording import is_pooled
from ensemble_horizon.products.writing import written_whole
from ensemble_horizon.vocabulary import COORDINATE_ATTRIBUTES, CRITERION, LEAD, PLACE, START

TITLE = "Lead-time limits of ensemble forecasts for regions and sites"
# CF recommends that dimensions other than time, height, y and x stand left of the time.
_ORDER = (PLACE, CRITERION, LEAD, START)


def write_horizon_file(
    path: str | os.PathLike[str],
    results: Iterable[VariableResult],
    provenance: Mapping[str, Any],
) -> Path:
    """Write ``horizons.nc``.

    Every field carries the name of its variable, such as ``wind_speed_horizon(place,
    wind_speed_criterion, start)``. Starts, places and leads are shared by all variables. Results
    pooled over all starts stand beside them without the start, as in ``wind_speed_pooled_horizon``.
    Thresholds in units other than those of the variable have names of their own, such as
    ``wind_speed_threshold_fraction``.

    Parameters
    ----------
    path : path
        The file to write.
    results : iterable of objects with ``curves``
        One per variable.
    provenance : mapping
        See `netcdf.global_attributes`.

    Raises
    ------
    ArgumentError
        If there is no result, or the leads of two variables differ in units.
    ProductError
        If the file cannot be written; nothing half-written stays behind.
    """
    curves = [result.curves.transpose(*_ORDER, ..., missing_dims="ignore") for result in results]
    _require_agreement(curves)
    single = [_without_pooled(part) for part in curves]
    axes = {name: _union(single, name) for name in (START, PLACE, LEAD)}
    target = Path(path)
    with written_whole(target) as neighbour:
        with open_new(neighbour) as file:
            file.setncatts(global_attributes(TITLE, provenance))
            taken = _put_axes(file, axes, single)
            for part, whole in zip(single, curves, strict=True):
                fields = split_thresholds(part)
                prefix = prefix_of(str(part.attrs.get("variable", "variable")), taken, fields)
                put_criteria(file, part, prefix)
                _note_positions(file, part, prefix, axes)
                _put_fields(file, _spread_out(part, axes), prefix)
                pooled = _only_pooled(whole)
                if pooled is not None:
                    _put_fields(file, _spread_out(pooled, axes), prefix, pooled=True)
            sizes = {str(name): axis.size for name, axis in axes.items()}
        verify_file(neighbour, sizes)
    return target


def _require_agreement(curves: Sequence[xr.Dataset]) -> None:
    for part in curves:
        for dimension in _ORDER:
            require_dimension(part, dimension, "curves")
    units = {str(part[LEAD].attrs.get("units", "hours")) for part in curves}
    if len(units) != 1:
        raise ArgumentError(
            "results",
            expected="at least one variable, and leads in the same units for all of them",
            found=f"lead units {sorted(units)}",
            remedy="write variables with different lead units to different files",
        )


def _pooled(part: xr.Dataset) -> np.ndarray:
    labels = start_labels(part)
    starts = part[START].values
    return np.array(
        [is_pooled(start, label) for start, label in zip(starts, labels, strict=True)], dtype=bool
    )


def _without_pooled(part: xr.Dataset) -> xr.Dataset:
    return part.isel({START: np.flatnonzero(~_pooled(part))})


def _only_pooled(part: xr.Dataset) -> xr.Dataset | None:
    found = np.flatnonzero(_pooled(part))
    return part.isel({START: int(found[0])}, drop=True) if found.size else None


def _union(parts: Sequence[xr.Dataset], name: str) -> xr.DataArray:
    """Return the values of a shared coordinate: leads and starts sorted, places as they come."""
    seen = dict.fromkeys(value for part in parts for value in part[name].values.tolist())
    first = parts[0][name]
    if len(seen) == first.size:
        return first
    values = list(seen) if name == PLACE else sorted(seen)
    array = np.array(values, dtype=None if name == PLACE else first.dtype)
    return xr.DataArray(array, dims=(name,), attrs=first.attrs, name=name)


def _spread_out(part: xr.Dataset, axes: Mapping[str, xr.DataArray]) -> xr.Dataset:
    """Return the fields of one variable on the shared axes; nothing is interpolated."""
    wanted = {
        name: axis.values
        for name, axis in axes.items()
        if name in part.dims and not np.array_equal(part[name].values, axis.values)
    }
    if not wanted:
        return part
    fills = {
        name: missing_value(str(name), field.attrs, field.dtype)
        for name, field in part.data_vars.items()
    }
    kept = {*part.dims, "threshold_units"}
    fields = part.drop_vars([name for name in part.coords if name not in kept])
    return fields.reindex(wanted, fill_value=fills).transpose(*_ORDER, ..., missing_dims="ignore")


def _put_axes(
    file: netCDF4.Dataset, axes: Mapping[str, xr.DataArray], parts: Sequence[xr.Dataset]
) -> set[str]:
    """Write the shared dimensions and coordinates; return the names that are in use."""
    for name, axis in axes.items():
        file.createDimension(name, axis.size)
    values, attributes = encoded_starts(axes[START].values)
    put(file, START, (START,), values, {**attributes, "axis": "T"})
    lead = axes[LEAD]
    put(file, LEAD, (LEAD,), lead.values.astype(float), lead_attributes(lead))
    put(file, "place_name", (PLACE,), axes[PLACE].values, {"long_name": "region or site"})
    taken = {START, PLACE, LEAD, "place_name"}
    labels = {
        start: label
        for part in parts
        for start, label in zip(part[START].values.tolist(), start_labels(part), strict=True)
    }
    if any(labels.values()):
        texts = np.array([labels[start] for start in axes[START].values.tolist()])
        put(file, "start_label", (START,), texts, {"long_name": "start as text"})
        taken.add("start_label")
    known: dict[str, dict[Any, Any]] = {}
    for part in parts:
        for name in ("place_kind", "latitude", "longitude"):
            if name in part.coords and part[name].dims == (PLACE,):
                known.setdefault(name, {}).update(
                    zip(part[PLACE].values.tolist(), part[name].values.tolist(), strict=True)
                )
    for name, table in known.items():
        blank: Any = "" if name == "place_kind" else np.nan
        column = np.array([table.get(place, blank) for place in axes[PLACE].values.tolist()])
        attributes = COORDINATE_ATTRIBUTES.get(name, {"long_name": "kind of place"})
        put(file, name, (PLACE,), column, attributes)
        taken.add(name)
    return taken


def _note_positions(
    file: netCDF4.Dataset, part: xr.Dataset, prefix: str, axes: Mapping[str, xr.DataArray]
) -> None:
    """Note where along the shared axes a variable stands that has not all of them."""
    for name, axis in axes.items():
        places = axis.values.tolist()
        positions = [places.index(value) for value in part[name].values.tolist()]
        if positions != list(range(axis.size)):
            note(file, prefix, f"{name}_positions", positions)


def _put_fields(
    file: netCDF4.Dataset, part: xr.Dataset, prefix: str, *, pooled: bool = False
) -> None:
    own, prefix = prefix, f"{prefix}_{POOLED}" if pooled else prefix
    about = str(part.attrs.get("long_name", own)) + (" (all starts pooled)" if pooled else "")
    lead_units = str(part[LEAD].attrs.get("units", file[LEAD].units))
    labels = [name for name in ("place_name", "place_kind") if name in file.variables]
    locations = [name for name in ("latitude", "longitude") if name in file.variables]
    fields = split_thresholds(part)
    note(file, own, "pooled_fields" if pooled else "fields", " ".join(fields))
    for name, field in fields.items():
        dimensions = tuple(f"{own}_{d}" if d == CRITERION else str(d) for d in field.dims)
        attributes = field_attributes(
            name, field.attrs, about, str(part.attrs.get("units", "1")), lead_units
        )
        near: list[str] = [*labels, *locations] if PLACE in field.dims else []
        if CRITERION in field.dims:
            near.append(f"{own}_criterion_name")
        attributes["coordinates"] = " ".join(near) or None
        if name == "horizon":
            attributes["ancillary_variables"] = " ".join(
                f"{prefix}_{other}"
                for other in ("status", "low", "high", "projected")
                if other in part
            )
        put(file, f"{prefix}_{name}", dimensions, field.values, attributes)
