"""What the NetCDF products share: valid names, attributes, compressed variables (CF-1.11)."""

from __future__ import annotations

import contextlib
import re
import unicodedata
from collections.abc import Iterator, Mapping, Sequence
from datetime import UTC, datetime
from importlib import metadata
from pathlib import Path
from typing import Any

import cf_units
import cftime
import netCDF4
import numpy as np
import xarray as xr

from ensemble_horizon.errors import ProductError
from ensemble_horizon.vocabulary import (
    CAUTION,
    CONVENTIONS,
    COORDINATE_ATTRIBUTES,
    CRITERION,
    LEAD,
    START,
    Status,
)

REFERENCES = (
    "Lorenz 1969 and 1982 (Tellus); Dalcher and Kalnay 1987 (Tellus); "
    "Brisch and Kantz 2019 (New Journal of Physics)"
)
_EPOCH = "1970-01-01 00:00:00"
_KNOWN = ("title", "inputs", "settings", "version", "command", "institution", "model", "created")
_SHOWN_INPUTS = 4

# Long name, and what the units are taken from: the variable, the leads, their inverse, or none.
FIELDS: dict[str, tuple[str, str]] = {
    "spread": ("ensemble spread", "variable"),
    "spread_low": ("lower end of the band of the spread", "variable"),
    "spread_high": ("upper end of the band of the spread", "variable"),
    "fitted": ("fitted law of growth", "variable"),
    "growth_rate": ("growth rate", "rate"),
    "growth_rate_low": ("lower end of the growth rate", "rate"),
    "growth_rate_high": ("upper end of the growth rate", "rate"),
    "growth_rate_se": ("standard error of the growth rate", "rate"),
    "doubling_time": ("doubling time of a small spread", "lead"),
    "doubling_time_low": ("lower end of the doubling time", "lead"),
    "doubling_time_high": ("upper end of the doubling time", "lead"),
    "doubling_time_se": ("standard error of the doubling time", "lead"),
    "doubling_time_at_start": ("doubling time of the first spread", "lead"),
    "initial_error": ("spread at lead zero under the fitted law", "variable"),
    "initial_error_se": ("standard error of the initial error", "variable"),
    "saturation": ("saturation of the spread under the fitted law", "variable"),
    "saturation_se": ("standard error of the saturation", "variable"),
    "horizon": ("lead-time limit", "lead"),
    "low": ("lower end of the lead-time limit", "lead"),
    "high": ("upper end of the lead-time limit, infinite beyond the run", "lead"),
    "projected": ("lead-time limit projected by the law beyond the run", "lead"),
    "status": ("status of the lead-time limit", "flag"),
    "law": ("law of growth", "flag"),
    "members": ("number of ensemble members used", "none"),
    "chance": ("probability that the criterion is exceeded", "none"),
    "threshold": ("threshold of the criterion", "variable"),
}

FIELD_COMMENTS = {
    "spread": "standard deviation over the members (divisor M - 1), averaged as variance",
    "projected": "an extrapolation by the fitted law; the run did not reach it",
    "high": "missing where there is no interval; infinite where it lies beyond the run",
}


_LONGEST = 80


def valid_name(label: str, taken: set[str] | None = None) -> str:
    """Return a NetCDF name made from any label: ASCII letters, digits and underscores.

    Long labels are cut: NetCDF names and names of files end at 255 characters, and two labels and
    a kind of number have to fit into one.

    Parameters
    ----------
    label : str
        A name from the settings.
    taken : set of str, optional
        Names in use; a number is added to stay clear of them, and the result joins the set.

    Examples
    --------
    >>> valid_name("gale / 17 m/s"), valid_name("Île d'été"), valid_name("2t")
    ('gale_17_m_s', 'Ile_d_ete', 'v_2t')
    """
    plain = unicodedata.normalize("NFKD", label).encode("ascii", "ignore").decode()
    base = re.sub(r"[^A-Za-z0-9]+", "_", plain).strip("_")[:_LONGEST].rstrip("_") or "unnamed"
    if not base[0].isalpha():
        base = f"v_{base}"
    name, count = base, 1
    while taken is not None and name in taken:
        count += 1
        name = f"{base}_{count}"
    if taken is not None:
        taken.add(name)
    return name


def version_of(provenance: Mapping[str, Any]) -> str:
    """Return the package version, as given or as installed."""
    try:
        return str(provenance.get("version") or metadata.version("ensemble-horizon"))
    except metadata.PackageNotFoundError:
        return "unknown"


def global_attributes(title: str, provenance: Mapping[str, Any]) -> dict[str, Any]:
    """Return the global attributes of a file.

    Parameters
    ----------
    title : str
        What the file holds.
    provenance : mapping
        Any of ``title``, ``inputs`` (list of paths), ``settings`` (text), ``version``, ``command``,
        ``institution``, ``model``, ``created`` (datetime); further keys become attributes of that
        name with ``provenance_`` before it.

    Examples
    --------
    >>> global_attributes("Limits", {"version": "1", "inputs": ["a.nc"]})["source"]
    'Ensemble Horizon 1, from 1 ensemble forecast file'
    """
    version = version_of(provenance)
    inputs = [str(path) for path in provenance.get("inputs", ())]
    created = provenance.get("created") or datetime.now(UTC)
    model = f" of {provenance['model']}" if provenance.get("model") else ""
    files = "file" if len(inputs) == 1 else "files"
    attributes: dict[str, Any] = {
        "Conventions": CONVENTIONS,
        "title": f"{provenance['title']}: {title}" if provenance.get("title") else title,
        "institution": str(provenance.get("institution") or "not stated"),
        "source": f"Ensemble Horizon {version}, from {len(inputs)} ensemble forecast "
        f"{files}{model}",
        "history": f"{created:%Y-%m-%dT%H:%M:%SZ} "
        f"{provenance.get('command') or 'ensemble-horizon'} (version {version})",
        "references": REFERENCES,
        "comment": CAUTION,
        "software_version": version,
        "input_count": np.int32(len(inputs)),
        "inputs": abbreviated(inputs),
        "settings": str(provenance.get("settings") or "not stated"),
    }
    for key in sorted(set(provenance) - set(_KNOWN)):
        attributes[f"provenance_{valid_name(str(key))}"] = str(provenance[key])
    return attributes


def abbreviated(inputs: Sequence[str]) -> str:
    """Return a list of files in short: the first ones, how many more, and the last.

    Examples
    --------
    >>> abbreviated(["a", "b", "c", "d", "e", "f"])
    'a, b, c, ... (2 more) ..., f'
    """
    if len(inputs) <= _SHOWN_INPUTS:
        return ", ".join(inputs) or "not stated"
    left = len(inputs) - _SHOWN_INPUTS
    return f"{', '.join(inputs[: _SHOWN_INPUTS - 1])}, ... ({left} more) ..., {inputs[-1]}"


def field_attributes(
    name: str, attributes: Mapping[str, Any], long_name: str, units: str, lead: str
) -> dict[str, Any]:
    """Return the attributes of one field of one variable.

    Parameters
    ----------
    name : str
        Name of the field, such as ``horizon``.
    attributes : mapping
        Its attributes in the dataset; ``units``, flags and ``comment`` are taken over.
    long_name, units : str
        Of the variable the field belongs to.
    lead : str
        Units of the leads.
    """
    text, kind = FIELDS.get(name, (name.replace("_", " "), "given"))
    inverse = "1" if lead == "1" else f"{lead.rstrip('s')}-1"
    table = {"variable": units, "lead": lead, "rate": inverse, "none": "1"}
    text = str(attributes.get("long_name") or text)
    result: dict[str, Any] = {
        "long_name": text if long_name in text else f"{text}: {long_name}",
    }
    if kind == "flag" and "flag_values" not in attributes:
        return result
    if "flag_values" in attributes:
        result["flag_values"] = np.asarray(attributes["flag_values"], dtype=np.int8)
        result["flag_meanings"] = str(attributes.get("flag_meanings", ""))
        return result
    result["units"] = str(attributes.get("units") or table.get(kind, "1"))
    if not is_unit(result["units"]):
        # CF readers stop at a unit they cannot parse.
        result["units_as_given"] = result.pop("units")
    comment = str(attributes.get("comment") or FIELD_COMMENTS.get(name, ""))
    if comment:
        result["comment"] = comment
    return result


def is_unit(text: str) -> bool:
    """Tell whether UDUNITS can read a unit."""
    try:
        return not cf_units.Unit(text).is_unknown()
    except ValueError:
        return False


def put(
    target: netCDF4.Dataset,
    name: str,
    dimensions: tuple[str, ...],
    values: np.ndarray,
    attributes: Mapping[str, Any],
    *,
    chunks: tuple[int, ...] | None = None,
    write: bool = True,
) -> Any:
    """Create a compressed variable, write ``values`` to it, and return it.

    With ``write=False`` only the type of ``values`` counts. Texts become NetCDF strings.
    """
    values = np.asarray(values)
    if values.dtype.kind in "UO":
        variable = target.createVariable(name, str, dimensions)
        values = values.astype(object)
    else:
        kind = np.dtype(np.int8) if values.dtype == bool else values.dtype
        # CF forbids missing values in coordinate variables.
        filled = kind.kind == "f" and dimensions != (name,)
        fill = np.asarray(np.nan, dtype=kind) if filled else False
        variable = target.createVariable(
            name,
            kind,
            dimensions,
            compression="zlib" if dimensions else None,
            complevel=1,
            shuffle=True,
            fill_value=fill,
            chunksizes=chunks,
        )
    variable.setncatts({key: value for key, value in attributes.items() if value is not None})
    if write:
        variable[...] = values
    return variable


def encoded_starts(starts: np.ndarray) -> tuple[np.ndarray, dict[str, Any]]:
    """Return starts as hours since 1970 with the attributes of the coordinate.

    Starts that are no times (a plain count of toy runs) come back as they are.
    """
    attributes: dict[str, Any] = dict(COORDINATE_ATTRIBUTES[START])
    if starts.dtype.kind == "M":
        since = starts.astype("datetime64[ns]") - np.datetime64(0, "ns")
        hours = since / np.timedelta64(1, "h")
        return hours, {**attributes, "units": f"hours since {_EPOCH}", "calendar": "standard"}
    first = starts.ravel()[0] if starts.size else None
    if isinstance(first, cftime.datetime):
        calendar = first.calendar
        hours = cftime.date2num(list(starts), f"hours since {_EPOCH}", calendar=calendar)
        return np.asarray(hours, dtype=float), {
            **attributes,
            "units": f"hours since {_EPOCH}",
            "calendar": calendar,
        }
    return np.asarray(starts, dtype=float), {"long_name": "number of the start", "units": "1"}


def lead_attributes(lead: xr.DataArray) -> dict[str, Any]:
    """Return the attributes of the lead; without a standard name where it is no time."""
    units = str(lead.attrs.get("units", "hours"))
    if units == "1":
        return {"long_name": "lead in model time units", "units": "1"}
    return {**COORDINATE_ATTRIBUTES[LEAD], "units": units}


def missing_value(name: str, attributes: Mapping[str, Any], kind: np.dtype[Any]) -> Any:
    """Return what stands for nothing in a field: NaN, ``no_data``, or -1 in other whole numbers."""
    if name == "status":
        return np.int8(Status.no_data)
    return kind.type(np.nan) if kind.kind == "f" else kind.type(-1)


def split_thresholds(part: xr.Dataset) -> dict[str, xr.DataArray]:
    """Return the fields, the thresholds parted by units: a NetCDF variable has one unit.

    Thresholds in the units of the variable stay ``threshold``; dimensionless ones become
    ``threshold_fraction``, others ``threshold_in_<units>``.
    """
    fields = {str(name): field for name, field in part.data_vars.items()}
    if "threshold" not in fields or "threshold_units" not in part:
        return fields
    threshold = fields.pop("threshold")
    units = [str(unit) for unit in part["threshold_units"].values]
    for unit in dict.fromkeys(units):
        name = "threshold_fraction" if unit in ("", "1") else f"threshold_in_{valid_name(unit)}"
        if unit == str(part.attrs.get("units", "1")):
            name = "threshold"
        rows = xr.DataArray([other == unit for other in units], dims=(CRITERION,))
        field = threshold.where(rows).transpose(*threshold.dims)
        fields[name] = field.assign_attrs(
            units=unit or "1", comment="missing where a criterion has other units"
        )
    return fields


@contextlib.contextmanager
def open_new(path: Path) -> Iterator[netCDF4.Dataset]:
    """Give a new NetCDF-4 file, closed at the end; the first error is the one that counts."""
    file = netCDF4.Dataset(path, "w", format="NETCDF4")
    try:
        yield file
    except BaseException:
        # Closing a file that could not be written raises a second, less telling error.
        with contextlib.suppress(RuntimeError, OSError):
            file.close()
        raise
    file.close()


def verify_file(path: Path, sizes: Mapping[str, int]) -> None:
    """Open a finished file again and compare its dimensions, before anybody relies on it."""
    with netCDF4.Dataset(path) as file:
        found = {name: file.dimensions[name].size for name in sizes if name in file.dimensions}
    if found != dict(sizes):
        raise ProductError(
            str(path),
            expected=f"dimensions {dict(sizes)} when read back",
            found=f"{found}",
            remedy="look at the disk, then write the products again",
        )
