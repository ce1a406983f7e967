"""Start, lead and member of every field of a file, from coordinates, the name, or the caller."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass

import netCDF4
import numpy as np

from ensemble_horizon.errors import InputError
from ensemble_horizon.runs.decoding import StoredVariable
from ensemble_horizon.runs.files import FoundFile
from ensemble_horizon.runs.levels import Level
from ensemble_horizon.runs.templates import member_label
from ensemble_horizon.runs.times import (
    Ticks,
    date_ticks,
    decode_dates,
    decode_durations,
    iso_text,
    to_hours,
    unit_kind,
)
from ensemble_horizon.vocabulary import HOURS, LEAD, MEMBER, START, VALID

# Toy systems count in units of model time; such leads are kept as they are, without hours.
MODEL_TIME = "1"


@dataclass(frozen=True)
class Wanted:
    """What the caller asked for; ``start`` in ticks, ``analysis`` for files without leads."""

    variables: tuple[str, ...] | None = None
    level: Level = None
    start: int | None = None
    analysis: bool = False


@dataclass(frozen=True)
class Moments:
    """Start, lead (both ticks) and member label over the run dimensions, all of one shape."""

    start: Ticks
    lead: Ticks
    member: np.ndarray | None
    calendar: str
    mismatch: str | None
    lead_units: str = HOURS


def read_moments(
    file: FoundFile,
    coordinates: Mapping[str, StoredVariable],
    dims: tuple[str, ...],
    sizes: tuple[int, ...],
    dim_roles: Mapping[str, str | None],
    asked: Wanted,
) -> Moments:
    """Work out start, lead and member over the run dimensions of one variable.

    Raises
    ------
    InputError
        If there is no reference time, no lead, or the times cannot be decoded.
    """
    calendar = next(
        (
            str(getattr(coordinates[role], "calendar", "standard")).lower()
            for role in (VALID, START)
            if role in coordinates
        ),
        "standard",
    )
    calendar = "standard" if calendar == "gregorian" else calendar
    times: dict[str, Ticks] = {}
    for role in (START, LEAD, VALID):
        if role in coordinates:
            ticks = _ticks(file.path, coordinates[role], role)
            if ticks is not None:
                times[role] = _spread_out(ticks, coordinates[role].dimensions, dims, sizes)
    if asked.analysis:
        return _analysis(file, times, sizes, calendar)
    _refuse_time_beside_lead(file.path, dims, dim_roles, times)
    start, mismatch = _start(file, times, sizes, calendar, asked)
    lead = _lead(file, times, start, sizes)
    told = file.parts.lead
    if mismatch is None and told is not None and lead.size == 1:
        inside = float(to_hours(lead).flat[0])
        if abs(inside - told) > 1e-6:
            mismatch = f"lead {inside:g} h inside the file, {told:g} h in its name"
    member = _members(file, coordinates.get(MEMBER), dims, sizes, dim_roles)
    plain = LEAD in coordinates and str(getattr(coordinates[LEAD], "units", "")) == MODEL_TIME
    return Moments(start, lead, member, calendar, mismatch, MODEL_TIME if plain else HOURS)


def _analysis(
    file: FoundFile, times: Mapping[str, Ticks], sizes: tuple[int, ...], calendar: str
) -> Moments:
    """Analyses: every valid time is a start, with the lead 0 and the member 0."""
    valid = times.get(VALID, times.get(START))
    if valid is None:
        if file.parts.start is None:
            raise _no_time(file.path)
        valid = np.full(sizes, date_ticks(file.parts.start), dtype=np.int64)
    zeros = np.zeros(sizes, dtype=np.int64)
    return Moments(valid, zeros, zeros.astype(object), calendar, None)


def _start(
    file: FoundFile,
    times: Mapping[str, Ticks],
    sizes: tuple[int, ...],
    calendar: str,
    asked: Wanted,
) -> tuple[Ticks, str | None]:
    inside = times.get(START)
    if inside is None and LEAD in times and VALID in times:
        inside = times[VALID] - times[LEAD]
    if asked.start is not None:
        return np.full(sizes, asked.start, dtype=np.int64), None
    if file.parts.start is None:
        if inside is None:
            raise _no_reference_time(file.path)
        return inside, None
    told = date_ticks(file.parts.start)
    if inside is not None and np.unique(inside).size > 1:
        # A name can only tell one of several starts.
        return inside, None
    mismatch = None
    if inside is not None and inside.size and (inside != told).any():
        first = iso_text(int(inside.flat[0]), calendar)
        mismatch = f"start {first} inside the file, {iso_text(told, calendar)} in its name"
    return np.full(sizes, told, dtype=np.int64), mismatch


def _lead(
    file: FoundFile, times: Mapping[str, Ticks], start: Ticks, sizes: tuple[int, ...]
) -> Ticks:
    if LEAD in times:
        return times[LEAD]
    if VALID in times:
        return times[VALID] - start
    if file.parts.lead is not None:
        return np.full(sizes, round(file.parts.lead * 3.6e9), dtype=np.int64)
    raise InputError(
        file.path,
        expected="a lead (forecast_period) or a valid time",
        found="neither as a coordinate, nor {lead} in the name",
        remedy="use a template with {lead}, or add the coordinate to the file",
    )


def _members(
    file: FoundFile,
    coordinate: StoredVariable | None,
    dims: tuple[str, ...],
    sizes: tuple[int, ...],
    dim_roles: Mapping[str, str | None],
) -> np.ndarray | None:
    along = [axis for axis, dim in enumerate(dims) if dim_roles[dim] == MEMBER]
    told = file.parts.member
    if told is not None and (not along or sizes[along[0]] == 1):
        return np.full(sizes, told, dtype=object)
    if coordinate is not None:
        values, over = _labels(coordinate)
        return _spread_out(values, over, dims, sizes)
    if along:
        count = np.arange(sizes[along[0]]).astype(object)
        return _spread_out(count, (dims[along[0]],), dims, sizes)
    return None


def _labels(coordinate: StoredVariable) -> tuple[np.ndarray, tuple[str, ...]]:
    values, dims = np.asarray(coordinate[...]), tuple(coordinate.dimensions)
    if values.ndim == len(dims) and coordinate.dtype == "S1":
        values = np.asarray(netCDF4.chartostring(values))
    dims = dims[: values.ndim]
    flat = np.empty(values.size, dtype=object)
    for index, value in enumerate(values.ravel()):
        is_number = isinstance(value, int | float | np.number) and float(value).is_integer()
        flat[index] = int(value) if is_number else member_label(str(value).strip().strip("\0"))
    return flat.reshape(values.shape), dims


def _ticks(path: str, coordinate: StoredVariable, role: str) -> Ticks | None:
    units = str(getattr(coordinate, "units", ""))
    kind = unit_kind(units)
    try:
        values = np.asarray(coordinate[...])
        if kind == "date":
            return decode_dates(values, units, str(getattr(coordinate, "calendar", "standard")))
        if units == MODEL_TIME and role == LEAD:
            return decode_durations(values, HOURS)
        return decode_durations(values, units) if kind == "duration" else None
    except ValueError as error:
        raise InputError(
            path,
            expected=f"times in {coordinate.name!r}",
            found=f"{str(error).rstrip('.')} (units {units!r})",
            remedy="correct the coordinate, or leave the file out",
        ) from error


def _spread_out(
    values: np.ndarray, over: tuple[str, ...], dims: tuple[str, ...], sizes: tuple[int, ...]
) -> np.ndarray:
    """Broadcast ``values`` with dimensions ``over`` to all run dimensions."""
    order = sorted(range(len(over)), key=lambda axis: dims.index(over[axis]))
    moved = np.transpose(values, order) if over else values
    shape = tuple(size if dim in over else 1 for dim, size in zip(dims, sizes, strict=True))
    return np.ascontiguousarray(np.broadcast_to(np.reshape(moved, shape), sizes))


def _refuse_time_beside_lead(
    path: str,
    dims: tuple[str, ...],
    dim_roles: Mapping[str, str | None],
    times: Mapping[str, Ticks],
) -> None:
    roles = [dim_roles[dim] for dim in dims]
    if VALID in roles and LEAD in roles and START not in times:
        dim = dims[roles.index(VALID)]
        raise InputError(
            path,
            expected="a reference time beside the lead",
            found=f"the dimension {dim!r}, which reads as valid time, beside a lead dimension",
            remedy=f"if {dim!r} holds starts, give it the standard_name forecast_reference_time",
        )


def _no_reference_time(path: str) -> InputError:
    return InputError(
        path,
        expected="a reference time (the start of the forecast)",
        found="none as a coordinate, and none in the name",
        remedy='use a template with {start}, such as "runs/{start:%Y%m%d%H}/*.nc", or give start=',
    )


def _no_time(path: str) -> InputError:
    return InputError(
        path,
        expected="a time coordinate",
        found="none",
        remedy="add a time coordinate with units such as 'hours since 2024-01-01'",
    )
