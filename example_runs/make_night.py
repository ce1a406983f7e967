"""Make the example night: 20 perturbed runs and a climatology, from the two-layer channel model.

    python example_runs/make_night.py [--folder FOLDER]

Everything follows from the constants below and the seeds among them. What the files hold and how
the numbers were chosen is told in the README beside this script.
"""

from __future__ import annotations

import argparse
from collections.abc import Iterator
from contextlib import contextmanager
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
# The channel is northern, the files southern. The equations are the same in the mirror of the
# equator: latitude, Coriolis parameter, streamfunction and northward wind change sign.
LATITUDE: Array = np.round(28.0 + 1.35 * np.arange(24), 2)
STORED_LATITUDE: Array = -LATITUDE
LONGITUDE: Array = -165.0 + 1.5 * np.arange(36.0)

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
SPIN_UP_DAYS = 32  # short enough that rounding errors stay small on any machine, see the README
BREEDING_DAYS = 2
INITIAL_WIND_ERROR = 0.3  # m s-1, RMS of the vector over the grid
PERTURBATION_SCALE = 9.0e5  # m, shorter scales are left out of the first disturbance
SEED = 20310214

# Wind near the surface over the geostrophic wind above it, over sea.
WIND_FACTOR = 0.65
AIR_DENSITY = 1.2  # kg m-3
MEAN_PRESSURE = 101300.0  # Pa

CLIMATOLOGY_RUNS = 8
CLIMATOLOGY_SKIP_DAYS = 15
CLIMATOLOGY_DAYS = 45

FILL = np.int16(-32768)
SCALE = {"eastward_wind": 0.02, "northward_wind": 0.02, "air_pressure_at_sea_level": 2.0}
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


def fields(states: Array, longitude: Array = LONGITUDE) -> dict[str, Array]:
    """Return wind and pressure (..., latitude, longitude) of states (..., N), mirrored."""
    found = CHANNEL.evaluate(states, LATITUDE, longitude - LONGITUDE[0])
    pressure = AIR_DENSITY * CHANNEL.coriolis * found["streamfunction_lower"]
    return {
        "eastward_wind": WIND_FACTOR * found["eastward_wind_lower"],
        "northward_wind": -WIND_FACTOR * found["northward_wind_lower"],
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
        toys.perturb(CHANNEL, before, 1, amplitude=1.0e5, seed=SEED + member, scale=scale)[0]
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
    """Return the standard deviation in time (latitude, longitude) of wind speed and each field.

    From runs of the same model that have long parted when sampling begins. The model is the same
    all along the channel, so samples are pooled along it and every longitude gets the same value.
    """
    start = forward(CHANNEL.default_state(), 10, 24)[-1]
    apart = toys.perturb(CHANNEL, start, CLIMATOLOGY_RUNS, amplitude=2.0e6, seed=SEED)
    settled = forward(apart, CLIMATOLOGY_SKIP_DAYS, 24)[-1]
    states = forward(settled, CLIMATOLOGY_DAYS, 12)
    around = CHANNEL.coordinates()["longitude"][1]
    found = fields(states, longitude=around)
    found["wind_speed"] = np.hypot(found["eastward_wind"], found["northward_wind"])
    columns = np.ones(LONGITUDE.size)
    return {name: values.std(axis=(0, 1, 3))[:, None] * columns for name, values in found.items()}


def write_member(path: Path, member: int, values: dict[str, Array]) -> None:
    """Write one member's fields (lead, latitude, longitude) as packed CF-NetCDF."""
    with _opened(path) as file:
        file.setncatts(_global_attributes("one perturbed run of the example night"))
        file.createDimension("forecast_period", LEAD_HOURS.size)
        _write_grid(file)
        lead = file.createVariable("forecast_period", "i4", ("forecast_period",))
        lead.setncatts({"standard_name": "forecast_period", "units": "hours"})
        lead[:] = LEAD_HOURS
        since = {"units": "hours since 2031-01-01 00:00:00", "calendar": "standard"}
        since["units_metadata"] = "leap_seconds: none"
        begin = int((START - np.datetime64("2031-01-01T00:00")) / np.timedelta64(1, "h"))
        time = file.createVariable("time", "i4", ("forecast_period",))
        time.setncatts({"standard_name": "time", **since})
        time[:] = begin + LEAD_HOURS
        reference = file.createVariable("forecast_reference_time", "i4")
        reference.setncatts({"standard_name": "forecast_reference_time", **since})
        reference[...] = begin
        number = file.createVariable("realization", "i4")
        number.setncatts({"standard_name": "realization", "units": "1"})
        number[...] = member
        for name, field in values.items():
            variable = file.createVariable(
                name,
                "i2",
                ("forecast_period", "latitude", "longitude"),
                zlib=True,
                complevel=9,
                shuffle=True,
                fill_value=FILL,
                chunksizes=(14, LATITUDE.size, LONGITUDE.size),
            )
            variable.setncatts(
                {
                    **ATTRIBUTES[name],
                    "scale_factor": SCALE[name],
                    "add_offset": OFFSET[name],
                    "coordinates": "forecast_reference_time realization time",
                }
            )
            variable[:] = field


def write_climatology(path: Path, deviations: dict[str, Array]) -> None:
    """Write the standard deviations, each under the name of its variable."""
    with _opened(path) as file:
        file.setncatts(_global_attributes("climatological standard deviations of the same model"))
        _write_grid(file)
        speed = {
            "standard_name": "wind_speed",
            "long_name": "wind speed near the surface",
            "units": "m s-1",
        }
        for name, field in deviations.items():
            variable = file.createVariable(name, "f4", ("latitude", "longitude"))
            attributes = dict(ATTRIBUTES.get(name, speed))
            attributes["long_name"] = f"standard deviation of {attributes['long_name']}"
            variable.setncatts({**attributes, "cell_methods": "time: standard_deviation"})
            variable[:] = field


@contextmanager
def _opened(path: Path) -> Iterator[netCDF4.Dataset]:
    """Open a neighbour file for writing and move it into place once it is whole."""
    path.parent.mkdir(parents=True, exist_ok=True)
    neighbour = path.with_name(path.name + ".part")
    try:
        with netCDF4.Dataset(neighbour, "w", format="NETCDF4_CLASSIC") as file:
            yield file
        neighbour.replace(path)
    finally:
        neighbour.unlink(missing_ok=True)


def _global_attributes(title: str) -> dict[str, str]:
    return {
        "Conventions": "CF-1.11",
        "title": f"Ouvrane Sea, {title}",
        "institution": "Quillmere operations desk (invented)",
        "source": "two-layer quasi-geostrophic channel model of Ensemble Horizon",
        "history": "made by example_runs/make_night.py",
        "comment": "Invented place and weather.",
        "license": "CC0 1.0",
    }


def _write_grid(file: netCDF4.Dataset) -> None:
    for name, values, units in (
        ("latitude", STORED_LATITUDE, "degrees_north"),
        ("longitude", LONGITUDE, "degrees_east"),
    ):
        file.createDimension(name, values.size)
        axis = file.createVariable(name, "f8", (name,))
        axis.setncatts({"standard_name": name, "units": units})
        axis[:] = values


def main() -> None:
    """Make the files and move them into place."""
    parser = argparse.ArgumentParser(description="Make the example night.")
    parser.add_argument("--folder", type=Path, default=Path(__file__).parent)
    folder = parser.parse_args().folder
    values = night()
    for member in range(MEMBERS):
        path = folder / NIGHT / f"member{member:02d}.nc"
        write_member(path, member, {name: field[:, member] for name, field in values.items()})
    write_climatology(folder / CLIMATOLOGY, climatology())


if __name__ == "__main__":
    main()
