"""A quarter-degree night, how its cost grows, and the layouts of files, as ratios of one run.

    python tests/benchmarks/scale.py [--small] [--folder FOLDER] [--repeat N] [--only PART ...]

Makes fields with a known law of growth (float32, compressed) and reports

    night    50 members x 41 leads x 721 x 1440, one file per member: (a) one thread reading every
             byte with netCDF4, (b) ``estimate`` with maps, and the peak memory of all its
             processes, and what ``estimate --plan`` said of it before;
    growth   the same for once, twice and four times the grid, members, leads and starts;
    layouts  the same 20 members x 41 leads x 361 x 720 chunked and compressed in different ways,
             without maps, each against one serial read of the same files.

Each is run several times and the smallest time is kept. Start-up, the time of a night of a few
points, is told and taken off where growth is judged. The numbers are for comparison with one
another: absolute seconds depend on the machine.
"""

from __future__ import annotations

import argparse
import os
import subprocess
import sys
import tempfile
from concurrent.futures import ProcessPoolExecutor
from dataclasses import dataclass, field, replace
from functools import cache, partial
from itertools import product
from pathlib import Path

import netCDF4
import numpy as np
from whole_night import describe, read_everything, smooth_noise, timed, watched

SETTINGS = """
[runs]
files = "{files}"
minimum_members = 2
[variables.t2]
source = "t2"
criteria = [{{tolerance = 3.0}}]
[growth]
law = "logistic"
[products]
folder = "{products}"
{options}
"""
PATTERNS = 12
STEP, APART = 6.0, 24.0


@dataclass(frozen=True)
class Runs:
    """Sizes, and the layout of the files: "members", "fields" (by member and lead) or "one"."""

    rows: int
    columns: int
    members: int
    leads: int
    starts: int = 1
    layout: str = "members"
    storage: dict | None = None
    name: str = "runs"
    shown: str = field(default="", compare=False)

    @property
    def values(self) -> float:
        """Bytes of values."""
        return 4.0 * self.rows * self.columns * self.members * self.leads * self.starts


@cache
def patterns(rows: int, columns: int) -> np.ndarray:
    """Unit fields of which all others are made."""
    rng = np.random.default_rng(0)
    return np.stack([smooth_noise(rng, rows, columns) for _ in range(PATTERNS)]).astype("f4")


def field_of(runs: Runs, start: int, member: int, lead: int) -> np.ndarray:
    """One field: what a member keeps from lead to lead, and a part that turns with the lead."""
    units = patterns(runs.rows, runs.columns)
    rng = np.random.default_rng([start, member])
    first, second = rng.integers(0, PATTERNS, 2)
    east = int(rng.integers(0, runs.columns)) + 3 * lead
    shape = 0.8 * units[first] + 0.6 * np.roll(units[second], east, axis=1)
    latitude = np.linspace(-90, 90, runs.rows, dtype="f4")[:, None]
    rate = 0.02 + 0.02 * np.cos(np.radians(latitude))
    size = 8 / (1 + (8 / 0.2 - 1) * np.exp(-rate * STEP * lead))
    values = 280 + 20 * np.cos(np.radians(latitude)) + size * shape
    return np.round(values * 100) / np.float32(100)


def make_part(runs: Runs, folder: Path, part: tuple[int, int]) -> None:
    """The files of one start and member, or of all members of a start."""
    start, member = part
    several = runs.layout == "one"
    leads = range(runs.leads)
    blocks = [[lead] for lead in leads] if runs.layout == "fields" else [list(leads)]
    for block in blocks:
        tail = f"_{block[0]:03d}" if runs.layout == "fields" else ""
        name = "members" if several else f"member{member:02d}{tail}"
        path = folder / f"start{start:02d}" / f"{name}.nc"
        if path.exists():
            continue
        path.parent.mkdir(parents=True, exist_ok=True)
        latitude = np.linspace(-90, 90, runs.rows)
        longitude = np.arange(runs.columns) * 360 / runs.columns
        members = range(runs.members) if several else [member]
        with netCDF4.Dataset(path.with_suffix(".part"), "w") as file:
            variable = describe(file, np.array(members) if several else member,
                                STEP * np.array(block), latitude, longitude, start * APART,
                                runs.storage)  # fmt: skip
            for number in members:
                fields = np.stack([field_of(runs, start, number, lead) for lead in block])
                if several:
                    variable[number] = fields
                else:
                    variable[:] = fields
        path.with_suffix(".part").replace(path)


def make(runs: Runs, root: Path) -> Path:
    """All files; the folder that holds a folder for each start."""
    folder = root / f"{runs.name}_{runs.rows}x{runs.columns}_{runs.members}m_{runs.leads}l"
    members = [0] if runs.layout == "one" else range(runs.members)
    patterns(runs.rows, runs.columns)  # before the workers, which are copies
    with ProcessPoolExecutor(os.cpu_count()) as pool:
        list(pool.map(partial(make_part, runs, folder), product(range(runs.starts), members)))
    return folder


def read_all(folder: Path) -> None:
    """One thread, every byte of every start."""
    for start in sorted(folder.glob("start*")):
        read_everything(start)


def settings_for(folder: Path, aside: Path, options: str = "") -> Path:
    """Settings of an estimate of the runs in a folder."""
    path = aside / "settings.toml"
    files = folder / "start*" / "member*.nc"
    path.write_text(SETTINGS.format(files=files, products=aside / "out", options=options))
    return path


def estimate(folder: Path, options: str = "") -> tuple[float, float]:
    """Seconds and peak memory in GiB of an estimate."""
    with tempfile.TemporaryDirectory() as aside:
        return watched("estimate", str(settings_for(folder, Path(aside), options)), "--quiet")


def measure(folder: Path, repeat: int, options: str = "") -> tuple[float, float, float]:
    """Seconds of a serial read and of an estimate, by turns, and the peak memory of the latter."""
    read_all(folder)  # warm the page cache for both alike
    reading, whole = [], []
    for _ in range(repeat):
        reading.append(timed(read_all, folder)[0])
        whole.append(estimate(folder, options))
    return min(reading), min(seconds for seconds, _ in whole), max(peak for _, peak in whole)


def size_on_disk(folder: Path) -> float:
    """Bytes of all files."""
    return float(sum(path.stat().st_size for path in folder.rglob("*.nc")))


def report_night(night: Runs, root: Path, repeat: int) -> None:
    """(a), (b) and the plan."""
    folder = make(night, root)
    print(f"night: {night.members} members x {night.leads} leads x {night.rows} x {night.columns}, "
          f"{night.values / 1e9:.2f} GB of values, {size_on_disk(folder) / 1e9:.2f} GB on disk; "
          f"{os.cpu_count()} cores")  # fmt: skip
    read_all(folder)
    with tempfile.TemporaryDirectory() as aside:
        settings = settings_for(folder, Path(aside))
        told = subprocess.run(
            [sys.executable, "-m", "ensemble_horizon", "estimate", str(settings), "--plan"],
            capture_output=True, text=True, check=True,
        ).stdout  # fmt: skip
    for line in told.splitlines():
        if line.startswith(("Memory", "Time")):
            print(f"    planned: {line}")
    a, b, peak = measure(folder, repeat)
    print(f"(a) read every byte, one thread  {a:8.2f} s")
    print(f"(b) estimate with maps           {b:8.2f} s  peak {peak:.2f} GiB   b / a {b / a:.2f}")
    _, plain, peak = measure(folder, repeat, "map_intervals = false")
    print(f"    without intervals on maps    {plain:8.2f} s  peak {peak:.2f} GiB   "
          f"ratio {plain / a:.2f}")  # fmt: skip


def report_growth(base: Runs, root: Path, repeat: int) -> None:
    """Once, twice, four times."""
    nothing = make(replace(base, rows=11, columns=22, members=4, leads=9, name="nothing"), root)
    start_up = min(estimate(nothing)[0] for _ in range(repeat))
    size = f"{base.members} members x {base.leads} leads x {base.rows} x {base.columns}"
    print(f"growth: from 1 start x {size}; start-up {start_up:.2f} s, taken off")
    read, first, peak = measure(make(base, root), repeat)
    first -= start_up
    print(f"    1x       {first:7.2f} s (read {read:6.2f} s, peak {peak:.2f} GiB)")
    grown = {
        "grid": lambda n: {"rows": base.rows * min(n, 2), "columns": base.columns * max(1, n // 2)},
        "members": lambda n: {"members": base.members * n},
        "leads": lambda n: {"leads": base.leads * n},
        "starts": lambda n: {"starts": n},
    }
    for what, sizes in grown.items():
        cells = []
        for factor in (2, 4):
            folder = make(replace(base, **sizes(factor), name=what), root)
            read, seconds, peak = measure(folder, repeat)
            seconds -= start_up
            cells.append(f"{factor}x {seconds:7.2f} s = {seconds / first:4.2f} of 1x "
                         f"(read {read:6.2f} s, peak {peak:.2f} GiB)")  # fmt: skip
        print(f"    {what:8s} {'   '.join(cells)}")


def layouts_of(base: Runs) -> list[Runs]:
    """The same runs, stored in different ways."""
    field_chunk = (1, base.rows, base.columns)
    deflated = {"zlib": True, "complevel": 4}
    found = [
        replace(base, name="field", shown="chunks (1, ny, nx)"),
        replace(base, name="column", shown="chunks (leads, 16, 16)",
                storage={**deflated, "chunksizes": (base.leads, 16, 16)}),
        replace(base, name="three", shown="chunks (3, ny, nx)",
                storage={**deflated, "chunksizes": (3, *field_chunk[1:])}),
        replace(base, name="contiguous", shown="contiguous", storage={"contiguous": True}),
        replace(base, name="fields", layout="fields", shown="one file per member and lead"),
        replace(base, name="one", layout="one", shown="one file, chunks (1, 1, ny, nx)"),
        replace(base, name="onecolumn", layout="one", shown="one file, (members, leads, 16, 16)",
                storage={**deflated, "chunksizes": (base.members, base.leads, 16, 16)}),
        replace(base, name="whole", shown="chunks (leads, ny, nx)",
                storage={**deflated, "chunksizes": (base.leads, *field_chunk[1:])}),
        *(replace(base, name=f"deflate{level}", shown=f"deflate {level}",
                  storage={"zlib": True, "complevel": level, "chunksizes": field_chunk})
          for level in (1, 9)),
    ]  # fmt: skip
    if netCDF4.__has_zstandard_support__:
        storage = {"compression": "zstd", "complevel": 4, "chunksizes": field_chunk}
        found.append(replace(base, name="zstd", shown="zstd", storage=storage))
    return found


def report_layouts(base: Runs, root: Path, repeat: int) -> None:
    """Each layout against a serial read of the same files."""
    print(f"layouts: {base.members} members x {base.leads} leads x {base.rows} x {base.columns}, "
          f"{base.values / 1e9:.2f} GB of values, regions only")  # fmt: skip
    for runs in layouts_of(base):
        folder = make(runs, root)
        a, b, peak = measure(folder, repeat, 'maps = "none"\nfigures = false')
        print(f"    {runs.shown:42s} {size_on_disk(folder) / 1e9:5.2f} GB  read {a:6.2f} s  "
              f"estimate {b:6.2f} s  ratio {b / a:4.2f}  peak {peak:.2f} GiB")  # fmt: skip


def main() -> None:
    """Make the runs, measure, print."""
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("--small", action="store_true", help="a hundredth of it, to try the whole")
    parser.add_argument("--folder", type=Path, help="keep the runs here between measurements")
    parser.add_argument("--repeat", type=int, default=3)
    parts = ("night", "growth", "layouts")
    parser.add_argument("--only", choices=parts, nargs="+", default=parts)
    options = parser.parse_args()
    night, base = Runs(721, 1440, 50, 41, name="night"), Runs(361, 720, 20, 41, name="layout")
    small = replace(base, members=10, leads=21, name="base")
    if options.small:
        night, base = replace(night, rows=91, columns=180), replace(base, rows=91, columns=180)
        small = replace(small, rows=91, columns=180)
    with tempfile.TemporaryDirectory() as scratch:
        root = (options.folder or Path(scratch)).resolve()
        for name, report, runs in zip(
            parts, (report_night, report_growth, report_layouts), (night, small, base), strict=True
        ):
            if name in options.only:
                report(runs, root, options.repeat)


if __name__ == "__main__":
    main()
