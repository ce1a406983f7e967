"""Two workers of a cluster against one, as a ratio measured in one run.

    python tests/benchmarks/cluster.py [--small] [--folder FOLDER] [--repeat N]

Makes the night of ``whole_night.py`` and runs ``estimate`` with maps and intervals on a dask
cluster of one worker and of two, each worker of one thread, scheduler and workers being processes
of their own on the loopback interface. Of the time of the command, what is done by the workers is
told by itself: the reading and the maps, from the command's own log. Each is run several times, in
turns, and the smallest is kept.
"""

from __future__ import annotations

import argparse
import re
import subprocess
import sys
import tempfile
import time
from pathlib import Path

import whole_night

sys.path.append(str(Path(__file__).parents[1] / "night"))
from loopback import Loopback

STAGE = re.compile(r"(reading|mapping) .*: ([\d.]+) s$", re.MULTILINE)


def run(folder: Path, cluster: Loopback) -> tuple[float, float]:
    """Seconds of the command, and of what the workers did for it."""
    with tempfile.TemporaryDirectory() as made:
        settings = Path(made) / "settings.toml"
        text = whole_night.SETTINGS.format(
            files=folder / "member{member:02d}.nc", products=f"{made}/products", intervals="true"
        )
        text += f'figures = false\n[engine]\nscheduler = "{cluster.file}"\n'
        settings.write_text(text, encoding="utf-8")
        command = [sys.executable, "-m", "ensemble_horizon", "estimate", str(settings), "-v"]
        begun = time.perf_counter()
        done = subprocess.run(command, capture_output=True, text=True, check=False)
        seconds = time.perf_counter() - begun
    if done.returncode != 0:
        raise SystemExit(done.stderr)
    return seconds, sum(float(item) for _, item in STAGE.findall(done.stderr))


def main() -> None:
    """Make the runs, measure, print ratios."""
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("--small", action="store_true", help="181 x 360 instead of 361 x 720")
    parser.add_argument("--folder", type=Path, help="keep the runs here between measurements")
    parser.add_argument("--repeat", type=int, default=3)
    options = parser.parse_args()
    rows, columns = (181, 360) if options.small else (361, 720)
    with tempfile.TemporaryDirectory() as scratch:
        folder = (options.folder or Path(scratch) / "runs").resolve()
        whole_night.make_runs(folder, rows, columns)
        whole_night.read_everything(folder)  # warm the page cache for all alike
        found: dict[int, list[tuple[float, float]]] = {1: [], 2: []}
        desks = {number: Path(scratch) / f"cluster{number}" for number in found}
        for desk in desks.values():
            desk.mkdir()
        with Loopback(desks[1], workers=1) as one, Loopback(desks[2], workers=2) as two:
            for cluster in (one, two):
                run(folder, cluster)  # workers load the libraries at their first task
            for _ in range(options.repeat):
                for number, cluster in ((1, one), (2, two)):
                    found[number].append(run(folder, cluster))
    whole, work = ({n: min(item[k] for item in found[n]) for n in found} for k in (0, 1))
    print(f"{rows * columns} points; seconds      command   by workers")
    for number in found:
        label = f"{number} worker{'s' if number > 1 else ''} of one thread"
        print(f"{label:<24} {whole[number]:8.2f} {work[number]:12.2f}")
    print(f"one / two                {whole[1] / whole[2]:8.2f} {work[1] / work[2]:12.2f}")


if __name__ == "__main__":
    main()
