"""Runs in many layouts, and a watch on every call that reads their values.

The watch stands between the program and the netCDF4 library: it hands every call on and notes
which part of which variable was asked for. The library decompresses a chunk once in each call that
touches it (HDF5 visits every chunk of a selection once), so touched chunks are decompressed chunks.
"""

from __future__ import annotations

import math
from collections import Counter
from dataclasses import dataclass, field
from itertools import product
from pathlib import Path

import netCDF4
import numpy as np

from ensemble_horizon.runs import handles

START = "hours since 2031-02-14 00:00"
HOURS = {"time": START, "start": START, "lead": "hours"}
NAMES = {
    "time": "time",
    "start": "forecast_reference_time",
    "lead": "forecast_period",
    "member": "realization",
    "lat": "latitude",
    "lon": "longitude",
}


@dataclass
class Watch:
    """Calls (path, variable, slices), and what each variable looks like."""

    calls: list[tuple[str, str, tuple[slice, ...]]] = field(default_factory=list)
    chunking: dict[tuple[str, str], tuple[int, ...]] = field(default_factory=dict)
    shapes: dict[tuple[str, str], tuple[int, ...]] = field(default_factory=dict)
    bytes: int = 0

    def open(self, path: str) -> Watched:
        """What stands for an open file."""
        return Watched(self, path, _open(path))

    @property
    def paths(self) -> set[str]:
        """Files that values were read from."""
        return {path for path, *_ in self.calls}

    def touched(self) -> Counter[tuple]:
        """How many calls touched each chunk of the chunked variables."""
        found: Counter[tuple] = Counter()
        for path, name, key in self.calls:
            sizes = self.chunking.get((path, name))
            if sizes is None:
                continue
            spans = [
                range(part.start // size, -(-part.stop // size))
                for part, size in zip(key, sizes, strict=True)
            ]
            found.update((path, name, *place) for place in product(*spans))
        return found

    def chunks(self, name: str) -> int:
        """Chunks of a variable in all the files that were read."""
        return sum(
            math.prod(-(-length // size) for length, size in
                      zip(self.shapes[key], sizes, strict=True))
            for key, sizes in self.chunking.items() if key[1] == name
        )  # fmt: skip

    def fields(self) -> Counter[tuple]:
        """How often each stored value was read: by (path, variable), least and most."""
        seen: dict[tuple[str, str], np.ndarray] = {}
        for path, name, key in self.calls:
            seen.setdefault((path, name), np.zeros(self.shapes[path, name], dtype=int))[key] += 1
        return Counter(
            {(*key, int(count)): 1 for key, counts in seen.items() for count in np.unique(counts)}
        )


_open = handles.open_raw


class Watched:
    """An open file that notes what is read of it."""

    def __init__(self, watch: Watch, path: str, dataset: netCDF4.Dataset) -> None:
        self._dataset = dataset
        self.variables = {
            name: _Variable(watch, path, variable) for name, variable in dataset.variables.items()
        }

    def close(self) -> None:
        self._dataset.close()


class _Variable:
    def __init__(self, watch: Watch, path: str, variable: netCDF4.Variable) -> None:
        self._watch, self._path, self._variable = watch, path, variable
        key = (path, variable.name)
        watch.shapes[key] = variable.shape
        if isinstance(variable.chunking(), list):
            watch.chunking[key] = tuple(variable.chunking())

    def __getattr__(self, name: str):
        return getattr(self._variable, name)

    def __getitem__(self, key: tuple[slice, ...]) -> np.ndarray:
        values = self._variable[key]
        self._watch.calls.append((self._path, self._variable.name, key))
        self._watch.bytes += values.nbytes
        return values


def describe(file: netCDF4.Dataset, **axes: np.ndarray | float) -> None:
    """Dimensions with coordinates, scalars as coordinates of no dimension."""
    for name, values in axes.items():
        dims = ()
        if np.ndim(values):
            file.createDimension(name, len(values))
            dims = (name,)
        variable = file.createVariable(name, "f8", dims)
        variable.standard_name = NAMES[name]
        units = {"lat": "degrees_north", "lon": "degrees_east", "member": "1"}
        variable.units = HOURS.get(name) or units[name]
        variable[...] = values


def fill(
    file: netCDF4.Dataset, name: str, dims: tuple[str, ...], values: np.ndarray, **storage
) -> None:
    """One variable, stored as asked."""
    variable = file.createVariable(name, "f4", dims, **storage)
    variable.units = "K"
    variable.coordinates = "start member"
    variable[:] = values


def write_runs(folder: Path, layout: str, values: np.ndarray, chunks=None, **storage) -> str:
    """Files of ``values`` (member, lead, lat, lon); a glob for them.

    ``layout`` is "members" (a file for each), "fields" (a file for each member and lead), "one"
    (one file for all) or "halves" (a file for each member and the first, and the later leads).
    """
    folder.mkdir(parents=True, exist_ok=True)
    members, leads, rows, columns = values.shape
    hours = 6.0 * np.arange(leads)
    places = {"lat": np.linspace(80, -80, rows), "lon": np.arange(columns) * 360.0 / columns}
    if chunks == "contiguous":
        storage = {"contiguous": True}
    elif chunks is not None:
        storage = {"zlib": True, "complevel": 4} | storage | {"chunksizes": chunks}
    parts = {
        "members": [(slice(m, m + 1), slice(None)) for m in range(members)],
        "fields": [
            (slice(m, m + 1), slice(t, t + 1)) for m in range(members) for t in range(leads)
        ],
        "halves": [
            (slice(m, m + 1), span)
            for m in range(members)
            for span in (slice(0, leads // 2 + 1), slice(leads // 2 + 1, leads))
        ],
        "one": [(slice(None), slice(None))],
    }[layout]
    for number, (member, lead) in enumerate(parts):
        with netCDF4.Dataset(folder / f"part{number:04d}.nc", "w") as file:
            several = layout == "one"
            numbers = np.arange(members)[member]
            dims = (*(("member",) if several else ()), "lead", "lat", "lon")
            describe(file, start=0.0, member=numbers if several else numbers[0],
                     lead=hours[lead], **places)  # fmt: skip
            part = values[member, lead]
            fill(file, "v", dims, part if several else part[0], **storage)
    return str(folder / "part*.nc")
