"""Runs of many starts with a known truth, and the command run on them.

Runs do not overlap, so that truth and members can be drawn about one centre: a consistent ensemble,
whose truth is like one more member, or one whose members lie too close together.
"""

from __future__ import annotations

import netCDF4
import numpy as np
from click.testing import CliRunner

from ensemble_horizon.cli.main import group

LATITUDES, LONGITUDES = (
    np.array([50.0, 20.0, -20.0, -50.0]),
    np.array([0.0, 10.0, 20.0, 30.0, 40.0]),
)
HOURS = 12.0 * np.arange(6)
GROWING = np.array([0.4, 0.7, 1.1, 1.6, 2.2, 2.6])  # size of the error
MEAN, DEVIATION = 280.0, 3.0


class Archive:
    """Starts ten days apart, ``scale`` times the spread that the error has."""

    def __init__(self, folder, starts=30, members=8, scale=1.0, seed=0):
        rng = np.random.default_rng(seed)
        self.folder, self.hours = folder, HOURS
        shape = (LATITUDES.size, LONGITUDES.size)
        self.moments = np.datetime64("2031-01-01T00", "h") + 240 * np.arange(starts)
        known = np.sqrt(DEVIATION**2 - GROWING**2)[:, None, None]
        centre = MEAN + known * rng.normal(size=(starts, HOURS.size, *shape))
        size = GROWING[:, None, None]
        self.truth = centre + size * rng.normal(size=centre.shape)
        noise = rng.normal(size=(starts, members, HOURS.size, *shape))
        self.members = centre[:, None] + scale * size * noise

    def write(self, name="t2", units="K", analysis_units="K", shift=0.0, skip=()):
        """Runs, analyses and climatology; ``shift`` hours late, without those of ``skip``."""
        for start in range(len(self.moments)):
            self.write_start(start, name, units)
        zero = self.moments[0]
        kept = [(s, t) for s in range(len(self.moments)) for t in range(HOURS.size)
                if (s, t) not in skip]  # fmt: skip
        hours = [
            (self.moments[s] - zero) / np.timedelta64(1, "h") + HOURS[t] + shift for s, t in kept
        ]
        offset = 273.15 if analysis_units == "degC" else 0.0
        values = np.stack([self.truth[s, t] for s, t in kept]) - offset
        _write(
            self.folder / "analyses.nc", {"time": hours}, {name: values}, str(zero), analysis_units
        )
        fields = {"deviation": np.full((4, 5), DEVIATION), "mean": np.full((4, 5), MEAN)}
        _write(self.folder / "climatology.nc", {}, fields, str(zero), units)

    def write_start(self, start, name="t2", units="K", path=None):
        path = path or self.folder / f"run_{start:03d}.nc"
        axes = {"member": np.arange(self.members.shape[1]), "time": HOURS}
        moment = str(self.moments[start])
        _write(path, axes, {name: self.members[start]}, moment, units, reference=True)

    def settings(
        self,
        more="",
        *,
        analyses=True,
        workers=1,
        climatology=True,
        runs="control = 0",
        products='maps = "none"\nfigures = false',
        variable="criteria = [{tolerance = 1.5}]",
    ):
        """The settings file."""
        climate = '[climatology]\nfile = "climatology.nc"\nnames = {t2 = "deviation"}\n'
        climate += 'mean_names = {t2 = "mean"}\n'
        path = self.folder / "settings.toml"
        path.write_text(
            f'[runs]\nfiles = "run_*.nc"\n{runs}\n[variables.t2]\n{variable}\n'
            + ('[analyses]\nfiles = "analyses.nc"\n' if analyses else "")
            + (climate if climatology else "")
            + f'{more}\n[engine]\nworkers = {workers}\n[products]\nfolder = "out"\n{products}\n'
        )
        return path

    def verify(self, more="", *options, status=0, **changes):
        """The command, which must end with ``status``."""
        return self.run("verify", self.settings(more, **changes), *options, status=status)

    def run(self, *arguments, status=0):
        given = [str(item) for item in arguments]
        result = CliRunner().invoke(group, given, catch_exceptions=False)
        assert result.exit_code == status, (result.exit_code, result.stdout, result.stderr)
        return result


def _write(path, axes, fields, epoch, units, reference=False):
    with netCDF4.Dataset(path, "w") as file:
        known = {
            "member": ("realization", "1"),
            "time": ("time", f"hours since {epoch}"),
            "latitude": ("latitude", "degrees_north"),
            "longitude": ("longitude", "degrees_east"),
        }
        for name, values in {**axes, "latitude": LATITUDES, "longitude": LONGITUDES}.items():
            file.createDimension(name, len(values))
            variable = file.createVariable(name, "f8", (name,))
            variable.setncatts({"standard_name": known[name][0], "units": known[name][1]})
            variable[:] = values
        if reference:
            variable = file.createVariable("reference", "f8")
            variable.setncatts({"standard_name": "forecast_reference_time"})
            variable.units = f"hours since {epoch}"
            variable[...] = 0.0
        for name, values in fields.items():
            dims = (*axes, "latitude", "longitude")
            variable = file.createVariable(name, "f8", dims, fill_value=-9999.0)
            if units:
                variable.units = units
            variable[:] = np.ma.masked_invalid(values)
