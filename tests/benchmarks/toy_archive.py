"""Time and memory of a rehearsal: the archive of 60 starts, and memory against the length of runs.

    python tests/benchmarks/toy_archive.py [--config CONFIG] [--folder FOLDER]

Reports

    (a) seconds, processor seconds of all processes and bytes of the archive of CONFIG,
        configs/rehearsal_60_starts.toml by default, made by ``toy run`` in a process of its own;
    (b) the largest memory of any process for one start of that archive, with its leads as they are
        and with ten times as many: it must not grow.

Processor seconds are what counts where the machine has other things to do.
"""

from __future__ import annotations

import argparse
import json
import os
import resource
import subprocess
import sys
import tempfile
import time
import tomllib
from pathlib import Path
from typing import Any

ROOT = Path(__file__).parents[2]
PROGRAM = """
import json, resource, sys
from ensemble_horizon.night.rehearsal import rehearse
from ensemble_horizon.settings.rehearsal import rehearsal_from
rehearse(rehearsal_from(json.load(sys.stdin)))
kinds = (resource.RUSAGE_SELF, resource.RUSAGE_CHILDREN)
print(max(resource.getrusage(kind).ru_maxrss for kind in kinds))
"""


def made(table: dict[str, Any]) -> tuple[float, float, float]:
    """Seconds, processor seconds, and the largest process in MiB, of the archive of ``table``."""
    before = resource.getrusage(resource.RUSAGE_CHILDREN)
    begun = time.perf_counter()
    run = subprocess.run(
        [sys.executable, "-c", PROGRAM],
        input=json.dumps(table),
        capture_output=True,
        text=True,
        check=True,
        env={**os.environ, "OPENBLAS_NUM_THREADS": "1"},
    )
    seconds = time.perf_counter() - begun
    after = resource.getrusage(resource.RUSAGE_CHILDREN)
    processor = after.ru_utime + after.ru_stime - before.ru_utime - before.ru_stime
    return seconds, processor, int(run.stdout) / 1024


def main() -> None:
    """Measure and print."""
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    default = ROOT / "configs" / "rehearsal_60_starts.toml"
    parser.add_argument("--config", type=Path, default=default)
    parser.add_argument("--folder", type=Path)
    options = parser.parse_args()
    table = tomllib.loads(options.config.read_text(encoding="utf-8"))
    with tempfile.TemporaryDirectory(dir=options.folder) as folder:
        table["archive"]["folder"] = f"{folder}/one"
        for leads in (table["forecast"]["leads"], 10 * table["forecast"]["leads"]):
            forecast = {**table["forecast"], "starts": 1, "leads": leads}
            archive = {**table["archive"], "folder": f"{folder}/{leads}"}
            _, _, memory = made({**table, "forecast": forecast, "archive": archive})
            print(f"(b) one start, {leads} leads: {memory:.0f} MiB in the largest process")
        seconds, processor, memory = made(table)
        size = sum(path.stat().st_size for path in Path(f"{folder}/one").rglob("*.nc"))
        forecast = table["forecast"]
        print(
            f"(a) {forecast['starts']} starts x {forecast['members']} members x "
            f"{forecast['leads']} leads, {len(table['versions'])} versions: {seconds:.0f} s, "
            f"{processor:.0f} processor seconds, {size / 1e9:.2f} GB, "
            f"{memory:.0f} MiB in the largest process; load {os.getloadavg()[0]:.1f}"
        )


if __name__ == "__main__":
    main()
