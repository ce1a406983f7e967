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
from ensemble_horizon.products.limits import lead_axis, start_labels
from ensemble_horizon.products.map_grid import FileGrids, space_of
from ensemble_horizon.products.netcdf import (
    encoded_starts,
    field_attributes,
    global_attributes,
    missing_value,
    open_new,
    put,
    split_thresholds,
    verify_file,
)
from ensemble_horizon.products.origin import POOLED, note, prefix_of, put_criteria
from ensemble_horizon.products.wording import is_pooled
from ensemble_horizon.products.writing import written_whole
from ensemble_horizon.vocabulary import (
    CRITERION,
    LATITUDE,
    LONGITUDE,
    START,
)

TITLE = "Lead-time limits of ensemble forecasts per grid point"


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
        verify_file(neighbour, {START: maps.start_count} if maps.start_count else {})


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
    pooled: bool
    dimensions: dict[str, str]
    space: tuple[str, ...]
    coordinates: str
    missing: dict[str, Any]


class MapFile:
    """The maps file while it is being written; memory holds one start of one variable.

    Fields carry the name of their variable, such as ``wind_speed_horizon(wind_speed_criterion,
    start, latitude, longitude)``. A variable on a second grid gets dimensions of its own
    (``latitude_2``). Starts that a variable lacks are filled with ``no_data``. Maps pooled over all
    starts stand beside them without the start, as in ``wind_speed_pooled_horizon``.
    """

    def __init__(self, file: netCDF4.Dataset, starts: np.ndarray | None = None) -> None:
        self._file = file
        self._layouts: dict[tuple[str, bool], _Layout] = {}
        self._prefixes: dict[str, str] = {}
        self._slots: dict[Any, int] = {}
        self._written: set[tuple[str, int]] = set()
        self._taken: set[str] = {START}
        self._grids = FileGrids(file, self._taken)
        for start in [] if starts is None else sorted(dict.fromkeys(starts.tolist())):
            self._slot(np.array([start], dtype=starts.dtype if starts is not None else None))

    @property
    def start_count(self) -> int:
        """Number of starts in the file so far."""
        return len(self._slots)

    def append(self, maps: xr.Dataset) -> None:
        """Write the maps of one variable for the starts they hold; a start comes only once.

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
            pooled = is_pooled(start, labels[position])
            key = (name, pooled)
            slot = -1 if pooled else self._slot(maps[START].values[position : position + 1])
            one = maps.isel({START: position}).compute()
            if key not in self._layouts:
                self._layouts[key] = self._define(name, maps, one, pooled=pooled)
            self._write(self._layouts[key], slot, one)

    def complete(self) -> None:
        """Fill the starts that some variable lacks, so that every cell has a status."""
        slots = list(self._slots.values())
        for layout in self._layouts.values():
            own = [slot for slot in slots if (layout.prefix, slot) in self._written]
            if not layout.pooled and own != slots:
                note(self._file, layout.prefix, "start_positions", own)
            for slot in [] if layout.pooled else slots:
                if (layout.prefix, slot) in self._written:
                    continue
                for field, missing in layout.missing.items():
                    variable = self._file[field]
                    if START in variable.dimensions:
                        variable[_at(variable, slot)] = missing

    def _slot(self, start: np.ndarray) -> int:
        values, attributes = encoded_starts(start)
        if START not in self._file.variables:
            self._file.createDimension(START, None)
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

    def _define(self, name: str, maps: xr.Dataset, one: xr.Dataset, *, pooled: bool) -> _Layout:
        if name not in self._prefixes:
            self._prefixes[name] = self._criteria(name, maps)
        prefix = self._prefixes[name]
        space = space_of(maps)
        names = self._grids.names(maps, space)
        near = [names[key] for key in (LATITUDE, LONGITUDE) if key in names and key not in space]
        layout = _Layout(
            prefix=f"{prefix}_{POOLED}" if pooled else prefix,
            pooled=pooled,
            dimensions={CRITERION: f"{prefix}_{CRITERION}", **{key: names[key] for key in space}},
            space=space,
            coordinates=" ".join(near),
            missing={},
        )
        fields = split_thresholds(one if pooled else maps)
        which = "pooled_" if pooled else ""
        note(self._file, prefix, f"{which}fields", " ".join(fields))
        pairs = [f"{key} {known}" for key, known in names.items()]
        note(self._file, prefix, f"{which}grid", " ".join(pairs))
        note(self._file, prefix, f"{which}space", " ".join(space))
        for key, field in fields.items():
            self._define_field(layout, key, field, maps, one)
        return layout

    def _criteria(self, name: str, maps: xr.Dataset) -> str:
        """Write the names of the criteria of a variable; return the variable's prefix."""
        prefix = prefix_of(name, self._taken, split_thresholds(maps))
        put_criteria(self._file, maps, prefix)
        return prefix

    def _define_field(
        self, layout: _Layout, key: str, field: xr.DataArray, maps: xr.Dataset, one: xr.Dataset
    ) -> None:
        order = [CRITERION, START, *layout.space]
        dimensions = [dimension for dimension in order if dimension in field.dims]
        lead, _ = lead_axis(maps)
        about = str(maps.attrs.get("long_name", layout.prefix))
        about += " (all starts pooled)" if layout.pooled else ""
        units = str(maps.attrs.get("units", "1"))
        attributes = field_attributes(key, field.attrs, about, units, lead)
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

    def _write(self, layout: _Layout, slot: int, one: xr.Dataset) -> None:
        if (layout.prefix, slot) in self._written:
            raise ArgumentError(
                "maps",
                expected="every start of a variable once",
                found=f"a start of {layout.prefix} a second time",
                remedy="append each start only once",
            )
        for key, field in split_thresholds(one).items():
            target = f"{layout.prefix}_{key}"
            if target not in layout.missing:
                raise ArgumentError(
                    "maps",
                    expected=f"the fields of the first start of {layout.prefix}",
                    found=f"a further field {key!r}",
                    remedy="give every start of a variable the same fields",
                )
            variable = self._file[target]
            order = [d for d in (CRITERION, *layout.space) if d in field.dims]
            variable[_at(variable, slot)] = field.transpose(*order).values
        self._written.add((layout.prefix, slot))


def _real_starts(maps: xr.Dataset) -> np.ndarray:
    pairs = zip(maps[START].values, start_labels(maps), strict=True)
    return maps[START].values[[not is_pooled(start, label) for start, label in pairs]]


def _at(variable: Any, slot: int) -> tuple[Any, ...]:
    return tuple(slot if name == START else slice(None) for name in variable.dimensions)
