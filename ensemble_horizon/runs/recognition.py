"""Recognising what a coordinate is: CF standard names first, then units and axis, then names.

Standard names, units and the axis attribute follow the CF conventions (CF-1.11, sections 4 and 5);
the plain names are common practice of forecast archives.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field

from ensemble_horizon.runs.times import unit_kind
from ensemble_horizon.vocabulary import (
    LATITUDE,
    LEAD,
    LONGITUDE,
    MEMBER,
    STANDARD_NAMES,
    START,
    VALID,
)

LEVEL = "level"
Y = "y"
X = "x"
CELLS = "cell"


@dataclass(frozen=True)
class Mark:
    """How one role shows itself; ``kind`` is the kind of unit it must have, if it has one."""

    standard_names: tuple[str, ...] = ()
    units: tuple[str, ...] = ()
    axis: str | None = None
    names: tuple[str, ...] = ()
    kind: str | None = None
    positive: bool = field(default=False)


_NORTH = ("degrees_north", "degree_north", "degree_n", "degrees_n", "degreen", "degreesn")
_EAST = ("degrees_east", "degree_east", "degree_e", "degrees_e", "degreee", "degreese")
_PRESSURE = ("pa", "hpa", "mbar", "millibar", "millibars", "mb", "bar", "dbar", "decibar")

MARKS: dict[str, Mark] = {
    LEAD: Mark(
        standard_names=STANDARD_NAMES[LEAD],
        names=(
            "lead",
            "lead_time",
            "leadtime",
            "lead_hours",
            "step",
            "forecast_period",
            "forecast_hour",
            "forecast_time",
            "fhour",
            "fcst_hour",
            "prediction_timedelta",
            "l",
        ),
        kind="duration",
    ),
    START: Mark(
        standard_names=STANDARD_NAMES[START],
        names=(
            "start",
            "start_time",
            "start_date",
            "forecast_reference_time",
            "reference_time",
            "reftime",
            "init",
            "init_time",
            "initial_time",
            "initialization_time",
            "init_date",
            "base_time",
            "analysis_time",
            "run_time",
            "cycle",
            "s",
        ),
        kind="date",
    ),
    VALID: Mark(
        standard_names=STANDARD_NAMES[VALID],
        names=("time", "valid_time", "validtime", "valid", "verification_time", "t", "date"),
        kind="date",
    ),
    MEMBER: Mark(
        standard_names=STANDARD_NAMES[MEMBER],
        axis="E",
        names=(
            "member",
            "members",
            "ensemble_member",
            "ensemble",
            "ens",
            "realization",
            "realisation",
            "number",
            "ensemble_number",
            "perturbation_number",
            "perturbation",
            "m",
        ),
    ),
    LATITUDE: Mark(
        standard_names=STANDARD_NAMES[LATITUDE],
        units=_NORTH,
        names=("latitude", "lat", "lats", "nav_lat", "xlat", "latitudes"),
    ),
    LONGITUDE: Mark(
        standard_names=STANDARD_NAMES[LONGITUDE],
        units=_EAST,
        names=("longitude", "lon", "lons", "long", "nav_lon", "xlong", "longitudes"),
    ),
    LEVEL: Mark(
        standard_names=(
            "air_pressure",
            "height",
            "depth",
            "altitude",
            "model_level_number",
            "geopotential_height",
            "air_potential_temperature",
            "ocean_sigma_coordinate",
            "atmosphere_sigma_coordinate",
            "atmosphere_hybrid_sigma_pressure_coordinate",
            "atmosphere_hybrid_height_coordinate",
            "height_above_mean_sea_level",
            "ocean_s_coordinate",
            "atmosphere_ln_pressure_coordinate",
        ),
        units=_PRESSURE,
        axis="Z",
        names=(
            "level",
            "lev",
            "levels",
            "plev",
            "pressure",
            "pressure_level",
            "isobaric",
            "isobaricinhpa",
            "height",
            "depth",
            "altitude",
            "z",
            "hybrid",
            "model_level",
            "bottom_top",
            "nz",
            "k",
        ),
        positive=True,
    ),
    Y: Mark(
        standard_names=("projection_y_coordinate", "grid_latitude"),
        axis="Y",
        names=("y", "rlat", "yc", "nj", "south_north", "ny", "j", "grid_latitude"),
    ),
    X: Mark(
        standard_names=("projection_x_coordinate", "grid_longitude"),
        axis="X",
        names=("x", "rlon", "xc", "ni", "west_east", "nx", "i", "grid_longitude"),
    ),
}

CELL_NAMES = (
    "cell", "cells", "ncells", "ncol", "ncells_owned", "station", "stations", "site", "sites",
    "point", "points", "values", "node", "nodes", "location", "column", "columns",
)  # fmt: skip


def recognise(name: str, attributes: Mapping[str, object]) -> str | None:
    """The role of a coordinate variable, or None.

    Parameters
    ----------
    name : str
        Name of the variable.
    attributes : mapping
        Its attributes; standard_name, units, axis, positive and dtype (as xarray writes for
        timedelta) are looked at.

    Examples
    --------
    >>> recognise("number", {"standard_name": "realization"})
    'member'
    >>> recognise("time", {"units": "hours since 2024-01-01"})
    'valid'
    >>> recognise("time", {"standard_name": "time", "units": "hours"})
    'lead'
    >>> recognise("plev", {"units": "hPa"})
    'level'
    """
    units = str(attributes.get("units", ""))
    kind = unit_kind(units)
    standard_name = str(attributes.get("standard_name", ""))
    for role, mark in MARKS.items():
        if standard_name in mark.standard_names:
            return _by_kind(role, kind)
    for role, mark in MARKS.items():
        if units.lower() in mark.units:
            return role
    lowered = name.lower()
    axis = str(attributes.get("axis", "")).upper()
    if kind is not None and (axis in ("", "T")):
        for role, mark in MARKS.items():
            if mark.kind == kind and lowered in mark.names:
                return role
        if kind == "date":
            return VALID
        if axis == "T" or lowered in MARKS[VALID].names:
            return LEAD
    for role, mark in MARKS.items():
        if axis and axis == mark.axis:
            return role
        if mark.positive and str(attributes.get("positive", "")).lower() in ("up", "down"):
            return role
    return recognise_name(name)


def recognise_name(name: str) -> str | None:
    """The role that a bare name tells, or None.

    Examples
    --------
    >>> recognise_name("rlat"), recognise_name("foo")
    ('y', None)
    """
    lowered = name.lower()
    for role, mark in MARKS.items():
        if lowered in mark.names:
            return role
    return CELLS if lowered in CELL_NAMES else None


def _by_kind(role: str, kind: str | None) -> str:
    # A standard name of the time family whose units say otherwise: the units are what is stored.
    if role == VALID and kind == "duration":
        return LEAD
    if role == LEAD and kind == "date":
        return VALID
    return role
