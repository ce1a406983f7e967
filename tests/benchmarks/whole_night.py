"""Time and memory of a whole night, as ratios measured in one run.

    python tests/benchmarks/whole_night.py [--small] [--folder FOLDER] [--repeat N]

Makes 20 members x 41 leads x 361 x 720 of a field with a known law of growth (one file per member,
float32, zlib level 4, one lead per chunk) and reports

    (a) one thread reading every byte with netCDF4,
    (b) a plain xarray script for the spread, plus scipy.optimize.curve_fit at every point
        (measured on a sample, scaled),
    (c) ``estimate`` with maps at all points, without intervals on the map,
    (d) the same with 90 percent intervals at every point,

the peak memory of (c) and (d) over all their processes, and the fits alone. Each of (a), (c) and
(d), and each kind of fit, is run several times and the smallest is kept. The numbers are for
comparison with one another: absolute seconds depend on the machine.
"""

from __future__ import annotations

import argparse
import os
import subprocess
import sys
import tempfile
import threading
import time
import warnings
from functools import partial
from operator import itemgetter
from pathlib import Path

import netCDF4
import numpy as np
import xarray as xr
from scipy.ndimage import gaussian_filter
from scipy.optimize import curve_fit

from ensemble_horizon.growth import fit_curves
from ensemble_horizon.horizon.map_limits import MAP_TOLERANCE

MEMBERS, LEADS = 20, 41
SAMPLE = 400
FILES = "member{member:02d}.nc"
SETTINGS = """
[runs]
files = "{files}"
[variables.t2]
source = "t2"
criteria = [{{tolerance = 3.0}}]
[growth]
law = "logistic"
[products]
folder = "{products}"
map_intervals = {intervals}
"""


def make_runs(folder: Path, rows: int, columns: int) -> None:
    """Write the members: a smooth field times a logistic law whose rate depends on the place."""
    folder.mkdir(parents=True, exist_ok=True)
    latitude = np.linspace(-90, 90, rows)
    longitude = np.arange(columns) * 360 / columns
    lead = 6.0 * np.arange(LEADS)
    east = np.sin(np.radians(longitude))
    rate = 0.02 + 0.02 * np.cos(np.radians(latitude))[:, None] * (1 + 0.3 * east)
    saturation = 8 + 4 * np.cos(2 * np.radians(longitude)) * np.ones((rows, 1))
    mean = 280 + 20 * np.cos(np.radians(latitude))[:, None]
    for member in range(MEMBERS):
        rng = np.random.default_rng(member)
        path = folder / FILES.format(member=member)
        if path.exists():
            continue
        pattern = smooth_noise(rng, rows, columns)
        with netCDF4.Dataset(path.with_suffix(".part"), "w") as file:
            variable = describe(file, member, lead, latitude, longitude)
            for number, hours in enumerate(lead):
                size = saturation / (1 + (saturation / 0.2 - 1) * np.exp(-rate * hours))
                variable[number] = np.round(mean + size * pattern, 2)
                fresh = smooth_noise(rng, rows, columns)
                pattern = np.sqrt(0.95) * pattern + np.sqrt(0.05) * fresh
        path.with_suffix(".part").replace(path)


def smooth_noise(rng: np.random.Generator, rows: int, columns: int) -> np.ndarray:
    """Unit noise with a length scale of a few points."""
    noise = gaussian_filter(rng.standard_normal((rows, columns)), 4, mode="wrap")
    return noise / noise.std()


def describe(file, member, lead, latitude, longitude, start=0.0, storage=None):
    """Define dimensions and coordinates; return the variable to fill, of one member or several."""
    for name, values, attributes in (
        ("time", start + lead, {"standard_name": "time", "units": "hours since 2031-02-14 00:00"}),
        ("lat", latitude, {"standard_name": "latitude", "units": "degrees_north"}),
        ("lon", longitude, {"standard_name": "longitude", "units": "degrees_east"}),
    ):
        file.createDimension(name, values.size)
        axis = file.createVariable(name, "f8", (name,))
        axis.setncatts(attributes)
        axis[:] = values
    reference = file.createVariable("reference", "f8")
    reference.setncatts({"standard_name": "forecast_reference_time"})
    reference.units = "hours since 2031-02-14 00:00"
    reference[...] = start
    several = ("member",) if np.ndim(member) else ()
    if several:
        file.createDimension("member", len(member))
    number = file.createVariable("realization", "i4", several)
    number.standard_name = "realization"
    number[...] = member
    dims = (*several, "time", "lat", "lon")
    chunks = (1,) * (len(dims) - 2) + (latitude.size, longitude.size)
    plain = {"zlib": True, "complevel": 4, "chunksizes": chunks}
    variable = file.createVariable("t2", "f4", dims, **(plain if storage is None else storage))
    variable.setncatts({"units": "K", "coordinates": "reference realization"})
    return variable


def read_everything(folder: Path) -> None:
    """(a) one thread, every byte."""
    for path in sorted(folder.glob("member*.nc")):
        with netCDF4.Dataset(path) as file:
            file["t2"][:]


def plain_spread(folder: Path) -> np.ndarray:
    """(b) the script that a practitioner would write first."""
    with xr.open_mfdataset(
        sorted(str(path) for path in folder.glob("member*.nc")),
        combine="nested",
        concat_dim="member",
        data_vars="all",
        coords="different",
        compat="equals",
        join="exact",
    ) as data:
        return data["t2"].std("member", ddof=1).values


def logistic(lead, initial, rate, saturation):
    """The law as curve_fit wants it."""
    return saturation / (1 + (saturation / initial - 1) * np.exp(-rate * lead))


def fit_one_by_one(lead: np.ndarray, curves: np.ndarray) -> tuple[float, np.ndarray]:
    """Seconds per curve of curve_fit, and the residual sums of squares."""
    residual = np.empty(len(curves))
    begun = time.perf_counter()
    for row, curve in enumerate(curves):
        guess = (max(curve[0], 1e-3), 0.03, curve.max())
        try:
            found, _ = curve_fit(logistic, lead, curve, guess, maxfev=5000)
            residual[row] = np.sum((logistic(lead, *found) - curve) ** 2)
        except RuntimeError:
            residual[row] = np.inf
    return (time.perf_counter() - begun) / len(curves), residual


def run_estimate(folder: Path, intervals: bool) -> tuple[float, float]:
    """(c), (d): seconds and peak memory in GiB of the command and all its children."""
    with tempfile.TemporaryDirectory() as products:
        settings = Path(products) / "settings.toml"
        settings.write_text(
            SETTINGS.format(
                files=folder / "member{member:02d}.nc",
                products=Path(products) / "out",
                intervals=str(intervals).lower(),
            )
        )
        return watched("estimate", str(settings), "--quiet")


def watched(*arguments: str) -> tuple[float, float]:
    """Seconds and peak memory in GiB of a command of the package and all its children."""
    begun = time.perf_counter()
    process = subprocess.Popen([sys.executable, "-m", "ensemble_horizon", *arguments])
    peak = PeakMemory(process.pid)
    status = process.wait()
    seconds = time.perf_counter() - begun
    if status != 0:
        raise SystemExit(f"{arguments[0]} ended with status {status}")
    return seconds, peak.stop()


class PeakMemory:
    """Largest memory of a process and its children, shared pages counted once (Linux)."""

    def __init__(self, pid: int) -> None:
        self._pid, self._peak, self._ended = pid, 0.0, threading.Event()
        self._thread = threading.Thread(target=self._watch, daemon=True)
        self._thread.start()

    def stop(self) -> float:
        """Peak in GiB; NaN where the system does not tell."""
        self._ended.set()
        self._thread.join()
        return self._peak or float("nan")

    def _watch(self) -> None:
        while not self._ended.wait(0.1):
            kilobytes = sum(proportional_kilobytes(pid) for pid in family(self._pid))
            self._peak = max(self._peak, kilobytes / 2**20)


def family(pid: int) -> list[int]:
    """A process and all that came from it."""
    found = [pid]
    for parent in found:
        try:
            for task in Path(f"/proc/{parent}/task").iterdir():
                found += [int(child) for child in (task / "children").read_text().split()]
        except OSError:
            continue
    return found


def proportional_kilobytes(pid: int) -> int:
    """Proportional set size of one process."""
    try:
        for line in Path(f"/proc/{pid}/smaps_rollup").read_text().splitlines():
            if line.startswith("Pss:"):
                return int(line.split()[1])
    except OSError:
        pass
    return 0


def timed(function, *arguments) -> tuple[float, object]:
    """Seconds and result."""
    begun = time.perf_counter()
    result = function(*arguments)
    return time.perf_counter() - begun, result


def main() -> None:
    """Make the runs, measure, print the table."""
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("--small", action="store_true", help="91 x 180 instead of 361 x 720")
    parser.add_argument("--folder", type=Path, help="keep the runs here between measurements")
    parser.add_argument("--repeat", type=int, default=3)
    options = parser.parse_args()
    rows, columns = (91, 180) if options.small else (361, 720)
    with tempfile.TemporaryDirectory() as scratch:
        folder = (options.folder or Path(scratch)).resolve()
        make_runs(folder, rows, columns)
        report(folder, rows * columns, options.repeat)


def report(folder: Path, points: int, repeat: int) -> None:
    """Measure in turn and print ratios."""
    read_everything(folder)  # warm the page cache for all alike
    reading, plain, mapped = [], [], []
    for _ in range(repeat):
        reading.append(timed(read_everything, folder)[0])
        plain.append(run_estimate(folder, intervals=False))
        mapped.append(run_estimate(folder, intervals=True))
    a = min(reading)
    c, c_memory = min(s for s, _ in plain), max(m for _, m in plain)
    d, d_memory = min(s for s, _ in mapped), max(m for _, m in mapped)
    with warnings.catch_warnings():
        warnings.simplefilter("ignore")
        spread_seconds, spread = timed(plain_spread, folder)
        lead = 6.0 * np.arange(LEADS)
        curves = np.asarray(spread).reshape(LEADS, -1).T.astype(float)
        chosen = np.random.default_rng(0).choice(len(curves), SAMPLE, replace=False)
        each, residual = min(
            (fit_one_by_one(lead, curves[chosen]) for _ in range(repeat)), key=itemgetter(0)
        )
    ours_all = partial(fit_curves, lead, curves, "logistic", tolerance=MAP_TOLERANCE)
    fit_seconds = min(timed(ours_all)[0] for _ in range(repeat))
    ours = fit_curves(lead, curves[chosen], "logistic", tolerance=MAP_TOLERANCE).rss
    b = spread_seconds + each * points
    worse = float(np.max(ours / residual - 1))
    print(f"{points} points, {MEMBERS} members, {LEADS} leads, {os.cpu_count()} cores; seconds")
    print(f"(a) read every byte, one thread            {a:8.2f}")
    print(f"(b) plain script, curve_fit at each point  {b:8.2f}  (spread {spread_seconds:.2f})")
    print(f"(c) estimate with maps                     {c:8.2f}  peak {c_memory:.2f} GiB")
    print(f"(d) with intervals at each point           {d:8.2f}  peak {d_memory:.2f} GiB")
    print(f"c / a {c / a:.2f}    b / c {b / c:.1f}    d / c {d / c:.2f}    d / a {d / a:.2f}")
    print(
        f"fit of one point: curve_fit {each * 1e6:.0f} us, here "
        f"{fit_seconds / points * 1e6:.2f} us on one core, "
        f"ratio {each / (fit_seconds / points):.0f}; "
        f"residual sum of squares at worst {worse:+.1e} of curve_fit's"
    )


if __name__ == "__main__":
    main()
