"""Run files, analyses and climatology of a rehearsal (CF-1.11), appended to as they come."""

from __future__ import annotations

import contextlib
from collections.abc import Iterator, Mapping, Sequence
from dataclasses import dataclass, replace
from datetime import datetime
from pathlib import Path
from typing import Any

import netCDF4
import numpy as np
import numpy.typing as npt

from ensemble_horizon.products.netcdf import open_new, verify_file
from ensemble_horizon.products.writing import folder_written_whole, written_whole
from ensemble_horizon.vocabulary import (
    CONVENTIONS,
    COORDINATE_ATTRIBUTES,
    HOURS,
    LEAD,
    MEMBER,
    START,
    VALID,
)

REFERENCE = "forecast_reference_time"
PERIOD = "forecast_period"
REALIZATION = "realization"
TIME = "time"

Values = npt.NDArray[Any]
Fields = Mapping[str, Values]


@dataclass(frozen=True)
class FieldFrame:
    """A field without its values: name, dimensions in space, attributes."""

    name: str
    dims: tuple[str, ...]
    attributes: Mapping[str, str]


@dataclass(frozen=True)
class ArchiveFrame:
    """What all files of an archive share.

    Parameters
    ----------
    coordinates : mapping of str to (dimension, values, attributes)
    fields : sequence of FieldFrame
    leads : array (L,)
        Hours.
    members : int
    epoch : datetime
        Times are written as hours since then.
    precision : str
        Type of the fields, ``"float32"`` or ``"float64"``.
    compression : int
        Level of zlib, 0 for none.
    attributes : mapping
        Global attributes.
    """

    coordinates: Mapping[str, tuple[str, Values, Mapping[str, str]]]
    fields: Sequence[FieldFrame]
    leads: Values
    members: int
    epoch: datetime
    precision: str
    compression: int
    attributes: Mapping[str, str]

    @property
    def sizes(self) -> dict[str, int]:
        """Sizes of the dimensions in space."""
        return {dim: len(values) for dim, values, _ in self.coordinates.values()}


class RunFile:
    """One open run file, or analysis file, whose fields are filled along the first dimension."""

    def __init__(self, file: netCDF4.Dataset, frame: ArchiveFrame) -> None:
        self._file = file
        self._frame = frame

    def put(self, first: int, fields: Fields) -> None:
        """Write values (n, ...) of every field to the places ``first`` to ``first + n - 1``."""
        for frame in self._frame.fields:
            values = fields[frame.name]
            self._file[frame.name][first : first + len(values)] = values


class MemberFiles:
    """The files of one start, one for each member, filled together."""

    def __init__(self, files: Sequence[RunFile]) -> None:
        self._files = files

    def put(self, first: int, fields: Fields) -> None:
        """Write values (leads, members, ...) of every field from the lead ``first`` on."""
        for member, file in enumerate(self._files):
            file.put(first, {name: values[:, member] for name, values in fields.items()})


@contextlib.contextmanager
def start_file(target: Path, frame: ArchiveFrame, hours: float) -> Iterator[RunFile]:
    """Write one file with all members of the start ``hours`` after the epoch, whole or not at all.

    Raises
    ------
    ProductError
        If it cannot be written.
    """
    with written_whole(target) as neighbour:
        with open_new(neighbour) as file:
            members = np.arange(frame.members, dtype=np.int32)
            yield _run(file, frame, hours, members)
        sizes = {PERIOD: frame.leads.size, REALIZATION: frame.members}
        verify_file(neighbour, {**sizes, **frame.sizes})


@contextlib.contextmanager
def member_files(target: Path, frame: ArchiveFrame, hours: float) -> Iterator[MemberFiles]:
    """Write a folder with one file per member of a start, whole or not at all.

    Raises
    ------
    ProductError
        If it cannot be written.
    """
    with folder_written_whole(target) as neighbour:
        paths = [neighbour / member_name(member) for member in range(frame.members)]
        with contextlib.ExitStack() as stack:
            yield MemberFiles(
                [
                    _run(stack.enter_context(open_new(path)), frame, hours, np.int32(member))
                    for member, path in enumerate(paths)
                ]
            )
        for path in paths:
            verify_file(path, {PERIOD: frame.leads.size, **frame.sizes})


def member_name(member: int | str) -> str:
    """Return the name of a member's file; ``"*"`` gives the pattern of all."""
    return f"member{member:02d}.nc" if isinstance(member, int) else f"member{member}.nc"


@contextlib.contextmanager
def series_file(target: Path, frame: ArchiveFrame, hours: Values, what: str) -> Iterator[RunFile]:
    """Write fields at the times ``hours`` after the epoch, such as analyses, whole or not at all.

    Raises
    ------
    ProductError
        If it cannot be written.
    """
    with written_whole(target) as neighbour:
        with open_new(neighbour) as file:
            _describe(file, frame, what)
            file.createDimension(TIME, len(hours))
            _coordinate(file, TIME, (TIME,), hours, VALID, _since(frame))
            _create_fields(file, frame, (TIME,), (1,), _auxiliary(frame))
            yield RunFile(file, frame)
        verify_file(neighbour, {TIME: len(hours), **frame.sizes})


def write_climatology(
    target: Path,
    frame: ArchiveFrame,
    deviation: Fields,
    mean: Fields,
    hours: tuple[float, float],
    what: str,
) -> None:
    """Write standard deviation and mean of every field from one time to another, whole or not.

    The mean of a field is called by `mean_name`. ``hours`` are the two times, after the epoch.
    """
    with written_whole(target) as neighbour:
        with open_new(neighbour) as file:
            _describe(file, frame, what)
            told = {**_since(frame), "comment": f"middle of the hours {hours[0]:g} to {hours[1]:g}"}
            _coordinate(file, TIME, (), np.float64(sum(hours) / 2), VALID, told)
            means = [replace(field, name=mean_name(field.name)) for field in frame.fields]
            for fields in (frame.fields, means):
                one = replace(frame, fields=fields)
                _create_fields(file, one, (), (), [TIME, *_auxiliary(frame)])
            for field in frame.fields:
                for name, method, values in (
                    (field.name, "standard_deviation", deviation),
                    (mean_name(field.name), "mean", mean),
                ):
                    file[name].cell_methods = f"time: {method}"
                    file[name][...] = values[field.name]
        verify_file(neighbour, frame.sizes)


def mean_name(field: str) -> str:
    """Return what the climatological mean of a field is called."""
    return f"{field}_mean"


def _run(
    file: netCDF4.Dataset, frame: ArchiveFrame, hours: float, members: Values | np.int32
) -> RunFile:
    _describe(file, frame, "")
    file.createDimension(PERIOD, frame.leads.size)
    since = _since(frame)
    _coordinate(file, REFERENCE, (), np.float64(hours), START, since)
    _coordinate(file, PERIOD, (PERIOD,), frame.leads, LEAD, {"units": HOURS})
    _coordinate(file, TIME, (PERIOD,), hours + frame.leads, VALID, since)
    dims: tuple[str, ...] = (PERIOD,)
    chunk: tuple[int, ...] = (1,)
    auxiliary = [TIME, REFERENCE, *_auxiliary(frame)]
    if np.ndim(members):
        file.createDimension(REALIZATION, frame.members)
        dims, chunk = (*dims, REALIZATION), (1, frame.members)
        _coordinate(file, REALIZATION, (REALIZATION,), members, MEMBER, {"units": "1"})
    else:
        auxiliary.append(REALIZATION)
        _coordinate(file, REALIZATION, (), members, MEMBER, {"units": "1"})
    if not frame.sizes:
        # Series: many leads a chunk, as a chunk of one number costs more than the number.
        chunk = (min(frame.leads.size, 256), *chunk[1:])
    _create_fields(file, frame, dims, chunk, auxiliary)
    return RunFile(file, frame)


def _describe(file: netCDF4.Dataset, frame: ArchiveFrame, what: str) -> None:
    file.setncatts({"Conventions": CONVENTIONS, **frame.attributes})
    if what:
        file.title = f"{frame.attributes['title']}: {what}"
    for name, (dim, values, attributes) in frame.coordinates.items():
        if dim not in file.dimensions:
            file.createDimension(dim, len(values))
        variable = file.createVariable(name, "f8", (dim,))
        variable.setncatts(dict(attributes))
        variable[...] = values


def _create_fields(
    file: netCDF4.Dataset,
    frame: ArchiveFrame,
    leading: tuple[str, ...],
    chunk: tuple[int, ...],
    auxiliary: Sequence[str],
) -> None:
    for field in frame.fields:
        dims = (*leading, *field.dims)
        kind: Any = np.dtype(frame.precision)
        options: dict[str, Any] = {"fill_value": kind.type(np.nan)}
        if dims:
            shape = (*chunk, *(frame.sizes[dim] for dim in field.dims))
            # Room for one chunk, as they are written in turn: the library would keep many.
            options.update(chunksizes=shape, chunk_cache=kind.itemsize * int(np.prod(shape)))
        if dims and frame.compression:
            options.update(compression="zlib", complevel=frame.compression, shuffle=True)
        variable = file.createVariable(field.name, kind, dims, **options)
        variable.setncatts(dict(field.attributes))
        if auxiliary:
            variable.coordinates = " ".join(auxiliary)


def _coordinate(
    file: netCDF4.Dataset,
    name: str,
    dims: tuple[str, ...],
    values: Any,
    role: str,
    more: Mapping[str, str],
) -> None:
    kind = np.asarray(values).dtype
    variable = file.createVariable(name, kind, dims)
    variable.setncatts({**COORDINATE_ATTRIBUTES[role], **more})
    variable[...] = values


def _since(frame: ArchiveFrame) -> dict[str, str]:
    units = f"hours since {frame.epoch:%Y-%m-%d %H:%M:%S}"
    return {"units": units, "calendar": "standard", "units_metadata": "leap_seconds: none"}


def _auxiliary(frame: ArchiveFrame) -> list[str]:
    """Coordinates in space that are no dimension of their own."""
    return [name for name, (dim, _, _) in frame.coordinates.items() if name != dim]
