"""Make the example night: 20 perturbed runs and a climatology, from the two-layer channel model.

    python example_runs/make_night.py [--folder FOLDER]

Everything follows from the constants below and the seeds among them. What the files hold and how
the numbers were chosen is told in the README beside this script.
"""

from __future__ import annotations

import argparse
import os
import shutil
from pathlib import Path

import netCDF4
import numpy as np
import numpy.typing as npt

from ensemble_horizon import toys

Array = npt.NDArray[np.float64]

START = np.datetime64("2031-02-14T00:00")
NIGHT = "night_20310214T00"
CLIMATOLOGY = "climatology.nc"
MEMBERS = 20
LEAD_HOURS = 6 * np.arange(41)
LATITUDE = 28.0 + 1.35 * np.arange(24)
LONGITUDE = -179.0 + 1.5 * np.arange(36)

CHANNEL = toys.TwoLayerChannel(
    zonal_waves=12,
    meridional_modes=14,
    length=1.5e7,
    width=8.0e6,
    latitude=43.5,
    deformation_radius=3.0e5,
    shear=50.0,
    jet_width=5.0e5,
    relaxation_rate=0.4,
    drag_rate=0.8,
)
STEP_HOURS = 1
SPIN_UP_DAYS = 60
BREEDING_DAYS = 2
INITIAL_WIND_ERROR = 0.3  # m s-1, RMS of the vector over the grid
PERTURBATION_SCALE = 9.0e5  # m, shorter scales are left out of the first disturbance
SEED = 20310214

# Wind near the surface over the geostrophic wind above it, over sea.
WIND_FACTOR = 0.65
AIR_DENSITY = 1.2  # kg m-3
MEAN_PRESSURE = 101300.0  # Pa

CLIMATOLOGY_DAYS = 60
CLIMATOLOGY_SKIP_DAYS = 20
CLIMATOLOGY_SHIFTS = 3

FILL = np.int16(-32768)
SCALE = {"eastward_wind": 0.01, "northward_wind": 0.01, "air_pressure_at_sea_level": 1.0}
OFFSET = {"eastward_wind": 0.0, "northward_wind": 0.0, "air_pressure_at_sea_level": MEAN_PRESSURE}
ATTRIBUTES = {
    "eastward_wind": {
        "standard_name": "eastward_wind",
        "long_name": "eastward wind near the surface",
        "units": "m s-1",
    },
    "northward_wind": {
        "standard_name": "northward_wind",
        "long_name": "northward wind near the surface",
        "units": "m s-1",
    },
    "air_pressure_at_sea_level": {
        "standard_name": "air_pressure_at_sea_level",
        "long_name": "air pressure at sea level",
        "units": "Pa",
    },
}


def fields(states: Array, shift: float = 0.0) -> dict[str, Array]:
    """Return wind and pressure (..., latitude, longitude) of states (..., N).

    ``shift`` moves the grid by so many degrees along the channel.
    """
    found = CHANNEL.evaluate(states, LATITUDE, LONGITUDE - LONGITUDE[0] + shift)
    pressure = AIR_DENSITY * CHANNEL.coriolis * found["streamfunction_lower"]
    return {
        "eastward_wind": WIND_FACTOR * found["eastward_wind_lower"],
        "northward_wind": WIND_FACTOR * found["northward_wind_lower"],
        "air_pressure_at_sea_level": MEAN_PRESSURE + pressure,
    }


def forward(states: Array, days: float, every_hours: int) -> Array:
    """Return states (record, ..., N) every so many hours, the first included."""
    steps = round(days * 24 / STEP_HOURS)
    run = toys.integrate(CHANNEL, states, steps, STEP_HOURS / 24.0, every_hours // STEP_HOURS)
    return run.states


def wind_distance(states: Array, control: Array) -> Array:
    """Return the RMS vector wind difference over the grid, m s-1, between states and a control."""
    one, other = fields(states), fields(control)
    square = sum((one[name] - other[name]) ** 2 for name in ("eastward_wind", "northward_wind"))
    weight = np.cos(np.radians(LATITUDE))[:, None]
    mean = np.mean(square * weight / weight.mean(), axis=(-2, -1))
    return np.asarray(np.sqrt(mean))


def initial_states(members: int = MEMBERS) -> Array:
    """Return the initial states (member, N) of the night; member 0 is the control.

    A large-scale disturbance is planted two days before the start, left to grow, and scaled back
    to `INITIAL_WIND_ERROR`: what the flow amplifies is then there from the first lead on, as it
    is in an analysis that was itself made with the model. Member m has a seed of its own, so that
    any one can be made alone.
    """
    before = forward(CHANNEL.default_state(), SPIN_UP_DAYS - BREEDING_DAYS, 24)[-1]
    k, l = CHANNEL.basis.wavenumbers()  # noqa: E741
    square = np.tile(k**2 + l**2, 2)
    scale = np.exp(-square * PERTURBATION_SCALE**2 / (2 * np.pi) ** 2) / square
    planted = [
        toys.perturb(CHANNEL, before, 1, norm=1.0e5, seed=SEED + member, scale=scale)[0]
        for member in range(1, members)
    ]
    later = forward(np.stack([before, *planted]), BREEDING_DAYS, 24)[-1]
    control, moved = later[0], later[1:]
    factor = INITIAL_WIND_ERROR / wind_distance(moved, control)
    return np.concatenate([control[None], control + factor[:, None] * (moved - control)])


def night(members: int = MEMBERS, leads: int = LEAD_HOURS.size) -> dict[str, Array]:
    """Return the fields of the night, each (lead, member, latitude, longitude)."""
    states = initial_states(members)
    if leads == 1:
        return fields(states[None])
    return fields(forward(states, LEAD_HOURS[leads - 1] / 24, int(LEAD_HOURS[1])))


def climatology() -> dict[str, Array]:
    """Return mean and standard deviation (latitude, longitude) by ``NAME_mean``, ``NAME_std``.

    From runs of the same model that part from each other well before sampling begins. The model
    is the same all along the channel, so each run is looked at on three stretches of it.
    """
    start = forward(CHANNEL.default_state(), 20, 24)[-1]
    apart = toys.perturb(CHANNEL, start, MEMBERS, norm=2.0e6, seed=SEED)
    settled = forward(apart, CLIMATOLOGY_SKIP_DAYS, 24)[-1]
    states = forward(settled, CLIMATOLOGY_DAYS, 12)
    parallel = np.pi / 180 * 6.371e6 * np.cos(np.radians(CHANNEL.latitude))
    around = CHANNEL.length / parallel
    samples: dict[str, list[Array]] = {name: [] for name in (*ATTRIBUTES, "wind_speed")}
    for number in range(CLIMATOLOGY_SHIFTS):
        found = fields(states, shift=number * around / CLIMATOLOGY_SHIFTS)
        found["wind_speed"] = np.hypot(found["eastward_wind"], found["northward_wind"])
        for name, values in found.items():
            samples[name].append(values.reshape(-1, *values.shape[-2:]))
    result = {}
    for name, parts in samples.items():
        joined = np.concatenate(parts)
        result[f"{name}_mean"] = joined.mean(axis=0)
        result[f"{name}_std"] = joined.std(axis=0, ddof=1)
    return result
