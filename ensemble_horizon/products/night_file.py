"""One night of limits as a file of the archive, with what they were measured by and a digest."""

from __future__ import annotations

import os
from collections.abc import Mapping
from pathlib import Path
from typing import Any

import netCDF4
import numpy as np

from ensemble_horizon.errors import ArgumentError, InputError, ProductError
from ensemble_horizon.products.netcdf import encoded_starts, global_attributes, open_new, put
from ensemble_horizon.products.nights import Measure, Night, NightLimit
from ensemble_horizon.products.sealed import seal, sealed_bytes, unsealed
from ensemble_horizon.products.writing import written_whole
from ensemble_horizon.vocabulary import LIMIT, START, STATUS_ATTRIBUTES, Status

TITLE = "Lead-time limits of one night"
KIND = "ensemble_horizon_night"
LAYOUT = 1
_MEASURE_TEXTS = {
    "kind": "kind of criterion",
    "rule": "what the criterion asks for",
    "threshold_units": "units of the threshold",
    "units": "units of the variable",
    "lead_units": "units of the leads",
}
_MEASURE_NUMBERS = {
    "threshold": "threshold of the criterion",
    "hold": "how long a crossing must last",
    "first_lead": "first lead of the run",
}
_KEY_TEXTS = {"variable": "variable", "place": "region or site", "criterion": "criterion"}
_NUMBERS = {
    "horizon": "lead-time limit",
    "low": "lower end of the lead-time limit",
    "high": "upper end of the lead-time limit, infinite beyond the run",
    "last_lead": "last lead of the run",
}


class NewerNightError(InputError):
    """A night that a newer program wrote: not broken, but not to be read here."""


def write_night_file(path: str | os.PathLike[str], night: Night, about: Mapping[str, Any]) -> Path:
    """Write the file of a night, replacing an older one at one stroke.

    NetCDF-4 with one row per limit, and behind it a line with the SHA-256 digest of all the rest,
    which NetCDF libraries pass over. The same night and ``about`` (with ``created``) give the same
    bytes.

    Parameters
    ----------
    path : path
    night : Night
    about : mapping
        See `netcdf.global_attributes`.

    Raises
    ------
    ArgumentError
        If the night has no limits, or the same one twice.
    ProductError
        If the file cannot be written or read back; nothing half-written stays behind.
    """
    keys = [limit.key for limit in night.limits]
    if not keys or len(set(keys)) < len(keys):
        raise ArgumentError(
            "night",
            expected="at least one limit, each variable, place and criterion once",
            found=f"{len(keys)} limits, {len(set(keys))} of them different",
            remedy="give the limits of one start",
        )
    target = Path(path)
    with written_whole(target) as neighbour:
        with open_new(neighbour) as file:
            attributes = {**global_attributes(TITLE, about), "kind": KIND}
            file.setncatts({**attributes, "layout": np.int32(LAYOUT)})
            _put_night(file, night)
        seal(neighbour)
        found = night_from(neighbour.read_bytes(), str(target))
        if [limit.key for limit in found.limits] != keys:
            raise ProductError(
                str(target),
                expected="the limits of the night when read back",
                found="others",
                remedy="name variables, places and criteria without control characters",
            )
    return target


def read_night_file(path: str | os.PathLike[str]) -> Night:
    """Read the file of a night.

    Raises
    ------
    InputError
        If it cannot be read, or is not whole and unchanged: its digest is checked.
    """
    return night_from(sealed_bytes(path), str(path))


def night_from(content: bytes, name: str) -> Night:
    """Read a night from the bytes of its file, which messages call ``name``.

    The digest comes first: the HDF5 library may crash on bytes that have changed.

    Raises
    ------
    InputError
        If it is not the file of a night, or not whole and unchanged.
    NewerNightError
        If a newer program wrote it.
    """
    body = unsealed(content)
    if body is None:
        raise _broken(name, "a file that is cut off or changed, or not the file of a night")
    try:
        with netCDF4.Dataset("night.nc", memory=body) as file:
            file.set_auto_maskandscale(False)
            return _get_night(file, name)
    except (OSError, RuntimeError, LookupError, AttributeError, ValueError) as error:
        raise _broken(name, "a file of another kind") from error


def _broken(name: str, found: str) -> InputError:
    return InputError(
        name,
        expected="the file of a night, whole and unchanged",
        found=found,
        remedy="file that night again from its products, or do without it",
    )


def _put_night(file: netCDF4.Dataset, night: Night) -> None:
    rows = night.limits
    file.createDimension(LIMIT, len(rows))
    values, attributes = encoded_starts(np.array([night.start]))
    put(file, START, (), values[0], attributes)
    for name, text in _KEY_TEXTS.items():
        put(file, name, (LIMIT,), np.array([getattr(row, name) for row in rows]),
            {"long_name": text})  # fmt: skip
    for name, text in _MEASURE_TEXTS.items():
        put(file, name, (LIMIT,), np.array([getattr(row.measure, name) for row in rows]),
            {"long_name": text})  # fmt: skip
    near = {"coordinates": f"{START} {' '.join(_KEY_TEXTS)}"}
    for name, text in _MEASURE_NUMBERS.items():
        put(file, name, (LIMIT,), np.array([getattr(row.measure, name) for row in rows], float),
            {"long_name": text, **near})  # fmt: skip
    for name, text in _NUMBERS.items():
        put(file, name, (LIMIT,), np.array([getattr(row, name) for row in rows], float),
            {"long_name": text, **near})  # fmt: skip
    flags = np.array([row.status for row in rows], np.int8)
    table = {**STATUS_ATTRIBUTES, "flag_values": np.array(STATUS_ATTRIBUTES["flag_values"], "i1")}
    put(file, "status", (LIMIT,), flags, {**table, **near})


def _get_night(file: netCDF4.Dataset, name: str) -> Night:
    if file.kind != KIND:
        raise ValueError(file.kind)
    if int(file.layout) > LAYOUT:
        raise NewerNightError(
            name,
            expected=f"layout {LAYOUT} of the file of a night, or an earlier one",
            found=f"layout {int(file.layout)}",
            remedy="read it with the version of the program that wrote it, or a newer one",
        )
    seconds = np.rint(float(file[START][...]) * 3600)
    start = np.datetime64(int(seconds), "s")
    texts = {name: [str(text) for text in file[name][:]] for name in _KEY_TEXTS | _MEASURE_TEXTS}
    numbers = {name: file[name][:].tolist() for name in _NUMBERS | _MEASURE_NUMBERS}
    columns: dict[str, list[Any]] = {**texts, **numbers}
    limits = []
    for row, status in enumerate(file["status"][:].tolist()):
        own = {name: columns[name][row] for name in _KEY_TEXTS | _NUMBERS}
        measure = {name: columns[name][row] for name in _MEASURE_TEXTS | _MEASURE_NUMBERS}
        limits.append(NightLimit(**own, status=Status(status), measure=Measure(**measure)))
    return Night(start, tuple(limits))
