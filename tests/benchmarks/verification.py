"""Time and memory of verifying many starts, as ratios measured in one run.

    python tests/benchmarks/verification.py [--small] [--folder FOLDER] [--repeat N]

Makes 30 starts x 20 members x 41 leads x 181 x 360 of a field whose errors grow (one file per start
and member, float32, zlib level 4, one lead per chunk), analyses at every valid time and a
climatology, and reports

    (a) one thread reading every byte of runs and analyses with netCDF4,
    (b) ``verify`` for two regions and a site,
    (c) the same with scores and skill limits at every point,
    (d) the same with factors for a calibration, of coarse cells, too,

with the peak memory of all their processes and what is left in the temporary folder. Each is run
several times and the smallest time is kept. The numbers are for comparison with one another.
"""

from __future__ import annotations

import argparse
import os
import subprocess
import sys
import tempfile
import time
from concurrent.futures import ProcessPoolExecutor
from functools import partial
from pathlib import Path

import netCDF4
import numpy as np
from whole_night import PeakMemory, smooth_noise, timed

MEMBERS, LEADS = 20, 41
STEP, APART = 6.0, 24.0
EPOCH = "hours since 2031-02-14 00:00"
SETTINGS = """
[runs]
files = "{files}/start*/member*.nc"
control = 0
[variables.t2]
criteria = [{{tolerance = 3.0}}]
[analyses]
files = "{files}/analyses.nc"
[climatology]
file = "{files}/climatology.nc"
names = {{t2 = "deviation"}}
mean_names = {{t2 = "mean"}}
[regions.Northern]
south = 20
[regions.Southern]
north = -20
[sites.Quay]
latitude = 50
longitude = 10
[products]
folder = "{products}"
figures = false
maps = "{maps}"
"""


class Weather:
    """A truth, and members about it whose errors grow, made of a few patterns shifted about."""

    def __init__(self, rows: int, columns: int) -> None:
        rng = np.random.default_rng(0)
        self.latitude = np.linspace(-90, 90, rows)
        self.longitude = np.arange(columns) * 360 / columns
        self.patterns = [smooth_noise(rng, rows, columns).astype("f4") for _ in range(24)]
        self.mean = 280 + 20 * np.cos(np.radians(self.latitude))[:, None] * np.ones(columns)

    def noise(self, rng: np.random.Generator) -> np.ndarray:
        """A unit field."""
        first, second = rng.integers(0, len(self.patterns), 2)
        shift = int(rng.integers(0, self.longitude.size))
        return 0.6 * self.patterns[first] + 0.8 * np.roll(self.patterns[second], shift, axis=1)

    def truth(self, number: int) -> np.ndarray:
        """The analysis of a valid time by its number: 40 leads pass between two drawn fields."""
        before, share = divmod(number, 8)
        ends = [self.noise(np.random.default_rng([7, before + k])) for k in (0, 1)]
        weight = share / 8
        mixed = (1 - weight) * ends[0] + weight * ends[1]
        return self.mean + 3 * mixed / np.hypot(1 - weight, weight)


def describe(file, weather: Weather, hours: np.ndarray | None, names: list[str]):
    """Define dimensions, coordinates and variables."""
    axes = [("lat", weather.latitude, "latitude", "degrees_north"),
            ("lon", weather.longitude, "longitude", "degrees_east")]  # fmt: skip
    if hours is not None:
        axes.insert(0, ("time", hours, "time", EPOCH))
    for name, values, standard, units in axes:
        file.createDimension(name, values.size)
        axis = file.createVariable(name, "f8", (name,))
        axis.setncatts({"standard_name": standard, "units": units})
        axis[:] = values
    dims = tuple(axis[0] for axis in axes)
    shape = (1,) * (len(dims) - 2) + (weather.latitude.size, weather.longitude.size)
    for name in names:
        variable = file.createVariable(name, "f4", dims, zlib=True, complevel=4, chunksizes=shape)
        variable.units = "K"


def make_member(weather: Weather, folder: Path, task: tuple[int, int]) -> None:
    """One member of one start."""
    start, member = task
    path = folder / f"start{start:03d}" / f"member{member:02d}.nc"
    if path.exists():
        return
    path.parent.mkdir(parents=True, exist_ok=True)
    rng, common = np.random.default_rng([1, start, member]), np.random.default_rng([2, start])
    first = int(start * APART / STEP)
    own, shared = weather.noise(rng), weather.noise(common)
    with netCDF4.Dataset(path.with_suffix(".part"), "w") as file:
        describe(file, weather, start * APART + STEP * np.arange(LEADS), ["t2"])
        file["t2"].coordinates = "reference realization"
        for name, value, attributes in (
            ("reference", start * APART,
             {"standard_name": "forecast_reference_time", "units": EPOCH}),
            ("realization", member, {"standard_name": "realization", "units": "1"}),
        ):  # fmt: skip
            scalar = file.createVariable(name, "f8" if name == "reference" else "i4")
            scalar.setncatts(attributes)
            scalar[...] = value
        for lead in range(LEADS):
            size = 3.5 / (1 + 8 * np.exp(-0.2 * lead))
            error = size * (0.8 * own + 0.6 * weather.noise(rng) + shared)
            file["t2"][lead] = np.round(weather.truth(first + lead) + error, 2)
    path.with_suffix(".part").replace(path)


def make_runs(folder: Path, starts: int, rows: int, columns: int) -> None:
    """Write runs, analyses and climatology."""
    weather = Weather(rows, columns)
    folder.mkdir(parents=True, exist_ok=True)
    tasks = [(start, member) for start in range(starts) for member in range(MEMBERS)]
    with ProcessPoolExecutor(os.cpu_count()) as pool:
        list(pool.map(partial(make_member, weather, folder), tasks, chunksize=10))
    times = int((starts - 1) * APART / STEP) + LEADS
    if not (folder / "analyses.nc").exists():
        with netCDF4.Dataset(folder / "analyses.nc", "w") as file:
            describe(file, weather, STEP * np.arange(times), ["t2"])
            for number in range(times):
                file["t2"][number] = np.round(weather.truth(number), 2)
        with netCDF4.Dataset(folder / "climatology.nc", "w") as file:
            describe(file, weather, None, ["mean", "deviation"])
            file["mean"][:] = weather.mean
            file["deviation"][:] = np.full(weather.mean.shape, 3.0)


def read_everything(folder: Path) -> None:
    """(a) one thread, every byte."""
    for path in [*sorted(folder.glob("start*/member*.nc")), folder / "analyses.nc"]:
        with netCDF4.Dataset(path) as file:
            file["t2"][:]


def run_verify(folder: Path, maps: str, calibration: bool) -> tuple[float, float]:
    """Seconds and peak memory in GiB of the command and all its children."""
    with tempfile.TemporaryDirectory() as scratch:
        products, own = Path(scratch) / "out", Path(scratch) / "tmp"
        own.mkdir()
        settings = Path(scratch) / "settings.toml"
        settings.write_text(SETTINGS.format(files=folder, products=products, maps=maps))
        command = [sys.executable, "-m", "ensemble_horizon", "verify", str(settings), "--quiet"]
        if calibration:
            command += ["--calibration", str(products / "calibration.nc")]
        begun = time.perf_counter()
        process = subprocess.Popen(command, env={**os.environ, "TMPDIR": str(own)})
        peak = PeakMemory(process.pid)
        status = process.wait()
        seconds = time.perf_counter() - begun
        if status != 0:
            raise SystemExit(f"verify ended with status {status}")
        left = sorted(path.name for path in own.iterdir())
        if left:
            raise SystemExit(f"left in the temporary folder: {left}")
        return seconds, peak.stop()


def main() -> None:
    """Make the runs, measure, print the table."""
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("--small", action="store_true", help="46 x 90 instead of 181 x 360")
    parser.add_argument("--folder", type=Path, help="keep the runs here between measurements")
    parser.add_argument("--repeat", type=int, default=2)
    options = parser.parse_args()
    starts = 30
    rows, columns = (46, 90) if options.small else (181, 360)
    with tempfile.TemporaryDirectory() as scratch:
        folder = (options.folder or Path(scratch)).resolve()
        make_runs(folder, starts, rows, columns)
        read_everything(folder)  # warm the page cache for all alike
        reading: list[float] = []
        found: dict[str, list[tuple[float, float]]] = {}
        kinds = {
            "(b) verify, places": ("none", False),
            "(c) with maps": ("pooled", False),
            "(d) with maps and calibration": ("pooled", True),
        }
        for _ in range(options.repeat):
            reading.append(timed(read_everything, folder)[0])
            for name, (maps, calibration) in kinds.items():
                found.setdefault(name, []).append(run_verify(folder, maps, calibration))
    a = min(reading)
    print(f"{starts} starts, {MEMBERS} members, {LEADS} leads, {rows} x {columns} points, "
          f"{os.cpu_count()} cores; seconds")  # fmt: skip
    print(f"(a) read every byte, one thread   {a:8.2f}")
    for name, runs in found.items():
        seconds, memory = min(s for s, _ in runs), max(m for _, m in runs)
        print(f"{name:32}  {seconds:8.2f}  peak {memory:.2f} GiB  ratio to (a) {seconds / a:.2f}")


if __name__ == "__main__":
    main()
