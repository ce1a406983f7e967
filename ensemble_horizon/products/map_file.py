"""``horizon_maps.nc``: limits and fits per grid point, written start by start."""

from __future__ import annotations

import contextlib
import os
from collections.abc import Iterable, Iterator, Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import netCDF4
import numpy as np
import xarray as xr

from ensemble_horizon.checks import require_dimension
from ensemble_horizon.errors import ArgumentError
from ensemble_horizon.products.limits import start_labels
from ensemble_horizon.products.netcdf import (
    encoded_starts,
    field_attributes,
    global_attributes,
    missing_value,
    open_new,
    put,
    split_thresholds,
    valid_name,
    verify_file,
)
from ensemble_horizon.products.wording import is_pooled
from ensemble_horizon.products.writing import written_whole
from ensemble_horizon.vocabulary import (
    COORDINATE_ATTRIBUTES,
    CRITERION,
    LATITUDE,
    LEAD,
    LONGITUDE,
    START,
)

TITLE = "Lead-time limits of ensemble forecasts per grid point"
_AXES = {LATITUDE: "Y", LONGITUDE: "X", "y": "Y", "x": "X"}


@contextlib.contextmanager
def map_file(
    path: str | os.PathLike[str],
    provenance: Mapping[str, Any],
    *,
    starts: np.ndarray | None = None,
) -> Iterator[MapFile]:
    """Open ``horizon_maps.nc`` for writing; it appears at ``path`` when the block succeeds.

    Parameters
    ----------
    path : path
        The file to write.
    provenance : mapping
        See `netcdf.global_attributes`.
    starts : numpy.ndarray, optional
        All starts to come. With them the starts may be appended in any order; without, every new
        one must be later than those before.

    Yields
    ------
    MapFile
        Call its ``append`` with the maps of one variable, one start at a time or several.

    Raises
    ------
    ProductError
        If the file cannot be written; nothing half-written stays behind.
    """
    with written_whole(path) as neighbour:
        with open_new(neighbour) as file:
            file.setncatts(global_attributes(TITLE, provenance))
            maps = MapFile(file, starts)
            yield maps
            maps.complete()
        verify_file(neighbour, {START: maps.start_count})


def write_map_file(
    path: str | os.PathLike[str], maps: Iterable[xr.Dataset], provenance: Mapping[str, Any]
) -> Path:
    """Write the maps of several variables, loading no more than one start of one at a time."""
    parts = list(maps)
    starts = np.concatenate([_real_starts(part) for part in parts]) if parts else None
    with map_file(path, provenance, starts=starts) as target:
        for part in parts:
            for position in range(part.sizes[START]):
                target.append(part.isel({START: [position]}))
    return Path(path)


@dataclass(frozen=True)
class _Layout:
    """How one variable lies in the file: its prefix, and the file's names of its dimensions."""

    prefix: str
    dimensions: dict[str, str]
    space: tuple[str, ...]
    coordinates: str
    missing: dict[str, Any]


class MapFile:
    """The maps file while it is being written; memory holds one start of one variable.

    Fields carry the name of their variable, such as ``wind_speed_horizon(wind_speed_criterion,
    start, latitude, longitude)``. A variable on a second grid gets dimensions of its own
    (``latitude_2``). Starts that a variable lacks are filled with ``no_data``.
    """

    def __init__(self, file: netCDF4.Dataset, starts: np.ndarray | None = None) -> None:
        self._file = file
        self._layouts: dict[str, _Layout] = {}
        self._grids: list[tuple[dict[str, xr.DataArray], dict[str, str]]] = []
        self._slots: dict[Any, int] = {}
        self._written: set[tuple[str, int]] = set()
        self._taken: set[str] = {START}
        file.createDimension(START, None)
        for start in [] if starts is None else sorted(dict.fromkeys(starts.tolist())):
            self._slot(np.array([start], dtype=starts.dtype if starts is not None else None))

    @property
    def start_count(self) -> int:
        """Number of starts in the file so far."""
        return len(self._slots)

    def append(self, maps: xr.Dataset) -> None:
        """Write the maps of one variable for the starts they hold; a start comes only once.

        A pooled pseudo start is passed over: it has no place on the axis of starts.

        Parameters
        ----------
        maps : xarray.Dataset
            Dimensions (start, criterion, *space); ``maps.attrs["variable"]`` names the variable.

        Raises
        ------
        ArgumentError
            If a start is given twice, or the maps do not fit those written before.
        """
        for dimension in (START, CRITERION):
            require_dimension(maps, dimension, "maps")
        name = str(maps.attrs.get("variable", "variable"))
        labels = start_labels(maps)
        for position, start in enumerate(maps[START].values):
            if is_pooled(start, labels[position]):
                continue
            one = maps.isel({START: position}).compute()
            if name not in self._layouts:
                self._define(name, maps, one)
            self._write(name, self._slot(maps[START].values[position : position + 1]), one)

    def complete(self) -> None:
        """Fill the starts that some variable lacks, so that every cell has a status."""
        for layout in self._layouts.values():
            for slot in set(self._slots.values()):
                if (layout.prefix, slot) in self._written:
                    continue
                for field, missing in layout.missing.items():
                    variable = self._file[field]
                    if START in variable.dimensions:
                        variable[_at(variable, slot)] = missing

    def _slot(self, start: np.ndarray) -> int:
        values, attributes = encoded_starts(start)
        if START not in self._file.variables:
            put(self._file, START, (START,), values, {**attributes, "axis": "T"}, write=False)
        key = float(values[0])
        if key not in self._slots:
            if self._slots and key < max(self._slots):
                raise ArgumentError(
                    "maps",
                    expected="starts in rising order, or all named when the file was opened",
                    found=f"start {start[0]} after a later one",
                    remedy="sort the starts, or open the file with starts=...",
                )
            self._slots[key] = len(self._slots)
            self._file[START][self._slots[key]] = key
        return self._slots[key]

    def _define(self, name: str, maps: xr.Dataset, one: xr.Dataset) -> None:
        prefix = valid_name(name, self._taken)
        criterion = f"{prefix}_{CRITERION}"
        self._file.createDimension(criterion, one.sizes[CRITERION])
        about = f"criterion for {maps.attrs.get('long_name', name)}"
        put(
            self._file,
            f"{criterion}_name",
            (criterion,),
            np.array([str(label) for label in maps[CRITERION].values]),
            {"long_name": about},
        )
        space = _space(maps)
        names = self._grid(maps, space)
        near = [names[key] for key in (LATITUDE, LONGITUDE) if key in names and key not in space]
        self._layouts[name] = _Layout(
            prefix=prefix,
            dimensions={CRITERION: criterion, **{key: names[key] for key in space}},
            space=space,
            coordinates=" ".join(near),
            missing={},
        )
        for key, field in split_thresholds(maps).items():
            self._define_field(self._layouts[name], key, field, maps, one)

    def _define_field(
        self, layout: _Layout, key: str, field: xr.DataArray, maps: xr.Dataset, one: xr.Dataset
    ) -> None:
        order = [CRITERION, START, *layout.space]
        dimensions = [dimension for dimension in order if dimension in field.dims]
        lead = maps[LEAD].attrs.get("units", "hours") if LEAD in maps.coords else "hours"
        about = str(maps.attrs.get("long_name", layout.prefix))
        units = str(maps.attrs.get("units", "1"))
        attributes = field_attributes(key, field.attrs, about, units, str(lead))
        near = [layout.coordinates] if set(layout.space) & set(dimensions) else []
        if CRITERION in dimensions:
            near.append(f"{layout.dimensions[CRITERION]}_name")
        attributes["coordinates"] = " ".join(filter(None, near)) or None
        name = f"{layout.prefix}_{key}"
        if key == "horizon" and "status" in maps:
            attributes["ancillary_variables"] = f"{layout.prefix}_status"
        # Single precision holds a lead to far less than a second, and packs twice as well.
        kind = np.dtype(np.float32) if field.dtype.kind == "f" else field.dtype
        chunks = tuple(one.sizes[d] if d in layout.space else 1 for d in dimensions)
        put(
            self._file,
            name,
            tuple(layout.dimensions.get(str(d), str(d)) for d in dimensions),
            np.empty(0, dtype=kind),
            attributes,
            chunks=chunks or None,
            write=False,
        )
        layout.missing[name] = missing_value(key, field.attrs, kind)

    def _write(self, name: str, slot: int, one: xr.Dataset) -> None:
        layout = self._layouts[name]
        if (layout.prefix, slot) in self._written:
            raise ArgumentError(
                "maps",
                expected="every start of a variable once",
                found=f"start number {slot + 1} of {name} a second time",
                remedy="append each start only once",
            )
        for key, field in split_thresholds(one).items():
            target = f"{layout.prefix}_{key}"
            if target not in layout.missing:
                raise ArgumentError(
                    "maps",
                    expected=f"the fields of the first start of {name}",
                    found=f"a further field {key!r}",
                    remedy="give every start of a variable the same fields",
                )
            variable = self._file[target]
            order = [d for d in (CRITERION, *layout.space) if d in field.dims]
            variable[_at(variable, slot)] = field.transpose(*order).values
        self._written.add((layout.prefix, slot))

    def _grid(self, maps: xr.Dataset, space: tuple[str, ...]) -> dict[str, str]:
        """Return the file's names for the dimensions and coordinates of a grid, old or new."""
        coords = {
            str(key): coordinate
            for key, coordinate in maps.coords.items()
            if coordinate.dims
            and set(coordinate.dims) <= set(space)
            and coordinate.dtype.kind in "fiu"
        }
        sizes = {key: maps.sizes[key] for key in space}
        for known, names in self._grids:
            same = set(known) == set(coords) and all(key in names for key in space)
            if (
                same
                and all(known[key].equals(coords[key]) for key in coords)
                and all(
                    self._file.dimensions[names[key]].size == size for key, size in sizes.items()
                )
            ):
                return names
        names = {key: valid_name(key, self._taken) for key in dict.fromkeys([*space, *coords])}
        for key, size in sizes.items():
            self._file.createDimension(names[key], size)
        for key, coordinate in coords.items():
            dimensions = tuple(names[str(dimension)] for dimension in coordinate.dims)
            values = (
                _steady(coordinate.values) if dimensions == (names[key],) else coordinate.values
            )
            put(self._file, names[key], dimensions, values, _coordinate_attributes(key, coordinate))
        self._grids.append((coords, names))
        return names


def _space(maps: xr.Dataset) -> tuple[str, ...]:
    dimensions = maps["horizon"].dims if "horizon" in maps else tuple(maps.dims)
    return tuple(str(name) for name in dimensions if name not in (START, CRITERION, LEAD))


def _real_starts(maps: xr.Dataset) -> np.ndarray:
    pairs = zip(maps[START].values, start_labels(maps), strict=True)
    return maps[START].values[[not is_pooled(start, label) for start, label in pairs]]


def _at(variable: Any, slot: int) -> tuple[Any, ...]:
    return tuple(slot if name == START else slice(None) for name in variable.dimensions)


def _steady(values: np.ndarray) -> np.ndarray:
    """Return longitudes that cross the date line as steadily rising ones, as CF asks."""
    steps = np.diff(values)
    if values.size < 2 or np.all(steps > 0) or np.all(steps < 0):
        return values
    return np.unwrap(values, period=360.0)


def _coordinate_attributes(key: str, coordinate: xr.DataArray) -> dict[str, Any]:
    attributes: dict[str, Any] = dict(COORDINATE_ATTRIBUTES.get(key, {}))
    if not attributes:
        # Projection axes would need a grid mapping, which the canonical layout does not carry.
        attributes = {
            "long_name": str(coordinate.attrs.get("long_name", f"{key} of the grid")),
            "units": str(coordinate.attrs.get("units", "1")),
        }
    if coordinate.dims == (key,) and key in _AXES:
        attributes["axis"] = _AXES[key]
    return attributes
