"""Products read back: curves and maps of a folder as the datasets they were written from."""

from __future__ import annotations

import contextlib
import os
from collections.abc import Iterator, Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import cftime
import netCDF4
import numpy as np
import xarray as xr

from ensemble_horizon.errors import InputError
from ensemble_horizon.products.netcdf import abbreviated
from ensemble_horizon.products.nights import date_of
from ensemble_horizon.products.origin import POOLED, Origin, origins
from ensemble_horizon.products.wording import iso_start
from ensemble_horizon.vocabulary import (
    COORDINATE_ATTRIBUTES,
    CRITERION,
    LATITUDE,
    LEAD,
    LONGITUDE,
    PLACE,
    START,
)

CURVE_FILE = "horizons.nc"
MAP_FILE = "horizon_maps.nc"
_ALL = "all"
_AXES = (START, PLACE, LEAD)
_KEPT = ("long_name", "units", "flag_values", "flag_meanings", "comment")
_SUFFIX = " (all starts pooled)"


@dataclass(frozen=True)
class StoredResult:
    """Curves of one variable read back, and its maps where they were written.

    Parameters
    ----------
    curves : Dataset (start, place, criterion, lead)
    maps : Dataset (start, criterion, *space) or None
    """

    curves: xr.Dataset
    maps: xr.Dataset | None


def read_results(
    folder: str | os.PathLike[str], start: str | np.datetime64 | None = None
) -> list[StoredResult]:
    """Read ``horizons.nc`` and ``horizon_maps.nc`` of a folder of products.

    The datasets are those that the files were written from, with fields in single precision where
    the file has them so. Longitudes that cross the date line come back steadily rising.

    Parameters
    ----------
    folder : path
        Where ``estimate`` wrote its products.
    start : ISO 8601 text or datetime64, optional
        Only this start, without what stands for all starts; no more than that is read. By default
        all that is there.

    Returns
    -------
    list of StoredResult
        One per variable, in the order of the settings.

    Raises
    ------
    InputError
        If there are no products, they cannot be read, or the start is not among them.
    ArgumentError
        If ``start`` is no date.

    Examples
    --------
    >>> read_results("nowhere")
    Traceback (most recent call last):
    ...
    ensemble_horizon.errors.InputError: nowhere/horizons.nc: expected the products of an estimate...
    """
    curve_path, map_path = Path(folder) / CURVE_FILE, Path(folder) / MAP_FILE
    with _opened(curve_path) as file:
        shared = _Starts.of(file, start)
        _require_start(curve_path, shared, start)
        found = list(origins(file))
        if not found:
            raise InputError(
                str(curve_path),
                expected="products that tell what their fields came from",
                found="none of its fields does, as in files of an earlier version",
                remedy="make the products again with estimate",
            )
        curves = {str(one.attributes["variable"]): _curves(file, one, shared) for one in found}
    maps: dict[str, xr.Dataset] = {}
    if map_path.exists():
        with _opened(map_path) as file:
            starts = _Starts.of(file, start, shared)
            for one in origins(file):
                part = _maps(file, one, starts)
                if part.sizes[START]:
                    maps[str(one.attributes["variable"])] = part
    return [StoredResult(part, maps.get(name)) for name, part in curves.items()]


def read_provenance(folder: str | os.PathLike[str]) -> dict[str, str]:
    """Read where the products of a folder come from: the global attributes of ``horizons.nc``.

    Raises
    ------
    InputError
        If there are no products, or they cannot be read.
    """
    with _opened(Path(folder) / CURVE_FILE) as file:
        return {name: str(file.getncattr(name)) for name in file.ncattrs()}


@contextlib.contextmanager
def _opened(path: Path) -> Iterator[netCDF4.Dataset]:
    if not path.exists():
        raise InputError(
            str(path),
            expected="the products of an estimate",
            found="no such file",
            remedy="make the products with estimate, or name their folder",
        )
    try:
        with netCDF4.Dataset(path) as file:
            file.set_auto_maskandscale(False)
            yield file
    except (OSError, RuntimeError, KeyError, IndexError, AttributeError) as error:
        raise InputError(
            str(path),
            expected="products that can be read",
            found=f"{getattr(error, 'strerror', None) or error}",
            remedy="make the products again with estimate",
        ) from error


@dataclass(frozen=True)
class _Starts:
    """The starts of a file, and which of them are wanted; ``pooled`` with all of them."""

    values: np.ndarray
    labels: tuple[str, ...]
    wanted: np.ndarray
    pooled: bool

    @classmethod
    def of(
        cls,
        file: netCDF4.Dataset,
        start: str | np.datetime64 | None,
        other: _Starts | None = None,
    ) -> _Starts:
        values = _decoded_starts(file)
        labels = tuple(map(str, file["start_label"][:])) if "start_label" in file.variables else ()
        if other is not None and other.labels:
            table = dict(zip(other.values.tolist(), other.labels, strict=True))
            labels = tuple(table.get(value, "") for value in values.tolist())
        wanted = np.arange(values.size)
        if start is not None:
            texts = {str(start), iso_start(date_of(start)) if values.dtype.kind == "M" else ""}
            wanted = wanted[[iso_start(value) in texts for value in values]]
        return cls(values, labels, wanted, start is None)

    def joined(self, chosen: np.ndarray, *, pooled: bool) -> dict[str, Any]:
        """Coordinates of the starts at positions ``chosen``, and of what stands for all."""
        values, labels = self.values[chosen], [self.labels[n] for n in chosen if self.labels]
        if pooled:
            kind = values.dtype.kind
            nothing = np.datetime64("NaT") if kind == "M" else None if kind == "O" else np.nan
            values = np.append(values, np.array([nothing], dtype=values.dtype))
            labels = [*(labels or [iso_start(value) for value in self.values[chosen]]), _ALL]
        coords: dict[str, Any] = {START: (START, values, COORDINATE_ATTRIBUTES[START])}
        if labels:
            coords["start_label"] = (START, labels)
        return coords


def _decoded_starts(file: netCDF4.Dataset) -> np.ndarray:
    if START not in file.variables:
        return np.empty(0, dtype="datetime64[ns]")
    hours, units = np.asarray(file[START][:], dtype=float), str(file[START].units)
    if not units.startswith("hours since"):
        return hours
    if file[START].calendar == "standard":
        seconds = np.rint(hours * 3600).astype("timedelta64[s]")
        return (np.datetime64(0, "s") + seconds).astype("datetime64[ns]")
    seconds = np.rint(hours * 3600)
    dates = cftime.num2date(
        seconds, units.replace("hours", "seconds"), file[START].calendar,
        only_use_cftime_datetimes=True,
    )  # fmt: skip
    return np.asarray(dates, dtype=object)


def _require_start(path: Path, starts: _Starts, start: str | np.datetime64 | None) -> None:
    if start is not None and not starts.wanted.size:
        there = [iso_start(value) for value in starts.values]
        raise InputError(
            str(path),
            expected=f"the start {start}",
            found=f"products of {abbreviated(there) if there else 'no single start'}",
            remedy="name one of these, or make the products of that start with estimate",
        )


def _curves(file: netCDF4.Dataset, one: Origin, starts: _Starts) -> xr.Dataset:
    own = one.positions(START, starts.values.size)
    chosen = own[np.isin(own, starts.wanted)]
    places = one.positions(PLACE, file.dimensions[PLACE].size)
    leads = one.positions(LEAD, file.dimensions[LEAD].size)
    at = {START: chosen, PLACE: places, LEAD: leads}
    names = {f"{one.prefix}_{CRITERION}": CRITERION}
    pooled = starts.pooled and "pooled_fields" in one.notes
    fields = _fields(file, one, names, at, pooled=pooled)
    table = {key: np.asarray(file[key][:])[places] for key in (LATITUDE, LONGITUDE)
             if key in file.variables and file[key].dimensions == (PLACE,)}  # fmt: skip
    if "place_kind" in file.variables:
        table["place_kind"] = file["place_kind"][:][places].astype(str)
    lead = {key: file[LEAD].getncattr(key) for key in file[LEAD].ncattrs()}
    coords = {
        **starts.joined(chosen, pooled=pooled),
        PLACE: file["place_name"][:][places].astype(str),
        **{key: (PLACE, values) for key, values in table.items()},
        LEAD: (LEAD, np.asarray(file[LEAD][:])[leads], lead),
        **one.coords,
    }
    data = xr.Dataset(fields, coords=coords, attrs=dict(one.attributes))
    return data.transpose(START, PLACE, CRITERION, LEAD, ..., missing_dims="ignore")


def _maps(file: netCDF4.Dataset, one: Origin, starts: _Starts) -> xr.Dataset:
    single = "fields" in one.notes
    pooled = starts.pooled and "pooled_fields" in one.notes
    own = one.positions(START, starts.values.size) if single else np.empty(0, dtype=int)
    chosen = own[np.isin(own, starts.wanted)]
    which = "" if single else "pooled_"
    grid = one.words(f"{which}grid")
    pairs = dict(zip(grid[::2], grid[1::2], strict=True))
    names = {known: key for key, known in pairs.items()}
    names[f"{one.prefix}_{CRITERION}"] = CRITERION
    fields = _fields(file, one, names, {START: chosen}, pooled=pooled)
    coords: dict[str, Any] = {**starts.joined(chosen, pooled=pooled), **one.coords}
    for key, known in pairs.items():
        if known in file.variables:
            dims = tuple(names[dimension] for dimension in file[known].dimensions)
            coords[key] = (dims, np.asarray(file[known][:]), _attributes(file[known], ""))
    data = xr.Dataset(fields, coords=coords, attrs=dict(one.attributes))
    space = one.words(f"{which}space")
    return data.transpose(START, CRITERION, *space, ..., missing_dims="ignore")


def _fields(
    file: netCDF4.Dataset,
    one: Origin,
    names: Mapping[str, str],
    at: Mapping[str, np.ndarray],
    *,
    pooled: bool,
) -> dict[str, xr.Variable]:
    """The fields of a variable, what stands for all starts behind the others."""
    single = {name: _field(file, f"{one.prefix}_{name}", one, names, at)
              for name in one.words("fields")}  # fmt: skip
    whole = {}
    if pooled:
        prefix = f"{one.prefix}_{POOLED}"
        whole = {name: _field(file, f"{prefix}_{name}", one, names, at)
                 for name in one.words("pooled_fields")}  # fmt: skip
    # A field without starts is the same for all of them.
    found = dict(single)
    for name, field in whole.items():
        if name not in single or START in single[name].dims:
            found[name] = _joined(single.get(name), field)
    return _with_one_threshold(found)


def _joined(single: xr.Variable | None, whole: xr.Variable) -> xr.Variable:
    """The values of all starts behind those of single ones."""
    dims = (START, *whole.dims)
    values = whole.values[np.newaxis]
    if single is not None:
        values = np.concatenate([single.transpose(*dims).values, values])
    return xr.Variable(dims, values, whole.attrs)


def _field(
    file: netCDF4.Dataset,
    key: str,
    one: Origin,
    names: Mapping[str, str],
    at: Mapping[str, np.ndarray],
) -> xr.Variable:
    variable = file[key]
    index = tuple(at.get(dimension, slice(None)) for dimension in variable.dimensions)
    empty = any(isinstance(part, np.ndarray) and not part.size for part in index)
    if empty:
        shape = [part.size if isinstance(part, np.ndarray) else size
                 for part, size in zip(index, variable.shape, strict=True)]  # fmt: skip
        values = np.empty(shape, dtype=variable.dtype)
    else:
        values = np.asarray(variable[index])
    dims = tuple(names.get(dimension, dimension) for dimension in variable.dimensions)
    about = str(one.attributes.get("long_name", one.attributes["variable"]))
    return xr.Variable(dims, values, _attributes(variable, about))


def _attributes(variable: Any, about: str) -> dict[str, Any]:
    found = {name: variable.getncattr(name) for name in variable.ncattrs()}
    kept = {name: found[name] for name in _KEPT if name in found}
    if "units_as_given" in found:
        kept["units"] = found["units_as_given"]
    if "long_name" in kept and about:
        kept["long_name"] = str(kept["long_name"]).removesuffix(_SUFFIX).removesuffix(f": {about}")
    if "flag_values" in kept:
        kept["flag_values"] = np.atleast_1d(kept["flag_values"]).tolist()
    return kept


def _with_one_threshold(fields: Mapping[str, xr.Variable]) -> dict[str, xr.Variable]:
    """Join the thresholds again that the file has apart by their units."""
    apart = [name for name in fields if name == "threshold" or name.startswith("threshold_")]
    kept = {name: field for name, field in fields.items() if name not in apart}
    if apart:
        first, *others = (fields[name] for name in apart)
        values = first.values.copy()
        for other in others:
            values = np.where(np.isnan(values), other.transpose(*first.dims).values, values)
        attributes = {"long_name": first.attrs.get("long_name", "threshold of the criterion")}
        kept["threshold"] = xr.Variable(first.dims, values, attributes)
    return kept
