"""A night that takes as little time as one can: a tiny archive, and the command run on it."""

from __future__ import annotations

import hashlib
import json
import os
import signal
import subprocess
import sys
from pathlib import Path

import netCDF4
import numpy as np

MADE = 1900000000  # seconds since 1970, for SOURCE_DATE_EPOCH: 2030-03-17T17:46:40Z
HOURS = 6.0 * np.arange(8)
LATITUDES, LONGITUDES = np.array([50.0, 40.0, 30.0]), np.array([0.0, 10.0, 20.0, 30.0])
SIZE = 4 / (1 + 39 * np.exp(-0.12 * HOURS))  # of the error: the logistic law
SIGNS = np.array([-1.5, -0.5, 0.5, 1.5])  # of four members
HOOKS = Path(__file__).parent / "hooks"
STAGES = ("survey", "estimate", "verify", "brief")


def member_values(day: int, number: int) -> np.ndarray:
    """Values (lead, latitude, longitude) of a member: the truth, and a pattern that grows."""
    shape = (LATITUDES.size, LONGITUDES.size)
    pattern = np.random.default_rng([day, 7]).normal(1.0, 0.3, size=shape)
    return truth(24.0 * day + HOURS) + SIGNS[number] * pattern * SIZE[:, None, None]


def truth(hours: np.ndarray) -> np.ndarray:
    """Values (time, latitude, longitude) at some hours since the beginning of the month."""
    waves = np.sin(hours[:, None, None] / 9 + np.arange(LONGITUDES.size))
    return 280 + waves + LATITUDES[:, None] / 50


class SmallNight:
    """Members in folders ``20310214``, analyses, and a settings file beside them."""

    def __init__(self, folder: Path) -> None:
        self.folder = folder
        self.products, self.archive = folder / "out", folder / "archive"
        self.config, self.report_file = folder / "night.toml", folder / "report.json"
        self.log_file = folder / "log.txt"

    def member(self, number: int, day: int = 14) -> Path:
        return self.folder / f"203102{day:02d}" / f"m{number}.nc"

    def write(self, days: tuple[int, ...] = (11, 12, 13, 14), names: tuple[str, ...] = ("t2",)):
        for day in days:
            for number in range(len(SIGNS)):
                self.write_member(number, day, names)
        self.write_analyses(days, names)
        return self

    def write_analyses(
        self, days: tuple[int, ...] = (11, 12, 13, 14), names: tuple[str, ...] = ("t2",)
    ) -> None:
        hours = np.arange(24.0 * min(days), 24.0 * max(days) + 1, 6.0)
        fields = {name: truth(hours) for name in names}
        _write(self.folder / "analyses.nc", "2031-02-01", hours - 24.0, fields)

    def write_member(
        self, number: int, day: int = 14, names: tuple[str, ...] = ("t2",), shift: float = 0.0
    ) -> Path:
        fields = {name: member_values(day, number) + shift for name in names}
        path = self.member(number, day)
        _write(path, f"2031-02-{day:02d}", HOURS, fields, reference=True)
        return path

    def settings(
        self,
        variables: str = "[variables.t2]\ncriteria = [{tolerance = 1.5}]",
        *,
        more: str = "",
        products: str = 'folder = "out"\nmaps = "none"\nfigures = false',
        night: str = 'archive = "archive"',
        analyses: bool = True,
    ) -> SmallNight:
        text = (
            f'title = "Night"\n[runs]\nfiles = "{{start:%Y%m%d}}/m{{member:d}}.nc"\n'
            f"minimum_members = 3\n{variables}\n{more}\n"
            + ('[analyses]\nfiles = "analyses.nc"\n' if analyses else "")
            + f"[engine]\nworkers = 1\n[products]\n{products}\n[night]\n{night}\n"
        )
        self.config.write_text(text, encoding="utf-8")
        return self

    @property
    def arguments(self) -> list[str]:
        return ["nightly", str(self.config), "--report", str(self.report_file)]

    def start(self, *options: str, environ: dict[str, str] | None = None) -> subprocess.Popen:
        """The real command, in a process group of its own; its log goes to ``log_file``."""
        paths = os.pathsep.join(filter(None, (str(HOOKS), os.environ.get("PYTHONPATH"))))
        surroundings = {**os.environ, "OPENBLAS_NUM_THREADS": "1", "PYTHONPATH": paths}
        surroundings |= {"SOURCE_DATE_EPOCH": str(MADE), **(environ or {})}
        if not surroundings["SOURCE_DATE_EPOCH"]:
            del surroundings["SOURCE_DATE_EPOCH"]
        command = [sys.executable, "-m", "ensemble_horizon", *self.arguments, *options]
        with self.log_file.open("wb") as log:
            return subprocess.Popen(
                command, env=surroundings, stdin=subprocess.DEVNULL, stdout=log, stderr=log,
                start_new_session=True,
            )  # fmt: skip

    def run(self, *options: str, status: int = 0, environ: dict[str, str] | None = None) -> str:
        """The real command, which must end with ``status``; returns its log."""
        process = self.start(*options, environ=environ)
        try:
            process.wait(120)
        except subprocess.TimeoutExpired:
            os.killpg(process.pid, signal.SIGKILL)
            raise
        log = self.log()
        assert process.returncode == status, (process.returncode, log)
        assert "Traceback" not in log, log
        assert "a fault of ours" not in log, log
        return log

    def log(self) -> str:
        return self.log_file.read_text(encoding="utf-8", errors="replace")

    def report(self) -> dict:
        return json.loads(self.report_file.read_text(encoding="utf-8"))

    def states(self) -> dict[str, str]:
        """The state of each stage, by the report."""
        return {stage["name"]: stage["state"] for stage in self.report()["stages"]}

    def night(self, stamp: str = "20310214T00") -> Path:
        return self.products / stamp

    def made(self) -> dict[str, bytes]:
        """All that stands in the folders of products and archive; of a state what is no time."""
        return {**contents(self.products), **contents(self.archive)}


class Forking:
    """Runs of the command from a process that has loaded it: see `forking.py`."""

    def __init__(self, warm: SmallNight) -> None:
        script = Path(__file__).with_name("forking.py")
        self._process = subprocess.Popen(
            [sys.executable, str(script), *warm.arguments, "-q"], text=True,
            env={**os.environ, "OPENBLAS_NUM_THREADS": "1", "SOURCE_DATE_EPOCH": str(MADE)},
            stdin=subprocess.PIPE, stdout=subprocess.PIPE,
        )  # fmt: skip

    def run(
        self, night: SmallNight, *options: str, kill_at: int = 0, made: int = MADE, user: int = 0
    ) -> tuple[int, int]:
        """Status and number of changes of the folders of a night."""
        task = {
            "arguments": [*night.arguments, *options], "stderr": str(night.log_file),
            "kill_at": kill_at, "user": user, "folders": [str(night.products), str(night.archive)],
            "environ": {"SOURCE_DATE_EPOCH": str(made)},
        }  # fmt: skip
        assert self._process.stdin is not None
        assert self._process.stdout is not None
        print(json.dumps(task), file=self._process.stdin, flush=True)
        for line in self._process.stdout:
            if line.startswith('{"status"'):
                found = json.loads(line)
                return found["status"], found["changes"]
        raise AssertionError("the forking process has ended")

    def done(self, night: SmallNight, *options: str, status: int = 0, **more: int) -> str:
        """A run that must end with ``status``; returns its log."""
        found, _ = self.run(night, *options, **more)
        log = night.log()
        assert found == status, (found, log)
        assert "Traceback" not in log, log
        assert "a fault of ours" not in log, log
        return log

    def close(self) -> None:
        self._process.communicate(timeout=30)


def contents(folder: Path) -> dict[str, bytes]:
    """All files below a folder, hidden ones too, but locks; folders end in a slash."""
    found = {}
    for path in sorted(folder.rglob("*")):
        name = f"{folder.name}/{path.relative_to(folder).as_posix()}"
        if path.is_dir():
            found[f"{name}/"] = b""
        elif path.name == "night.json":
            found[name] = _timeless(path)
        elif path.name != ".nightly.lock":
            found[name] = path.read_bytes()
    return found


def faults_of(folder: Path) -> list[str]:
    """What is not whole in the folder of a night, by its own state; nothing where it is absent."""
    if not folder.exists():
        return []
    try:
        state = json.loads((folder / "night.json").read_text(encoding="utf-8"))
    except (OSError, ValueError) as error:
        return [f"night.json: {error}"]
    said = state.pop("digest")
    plain = json.dumps(state, sort_keys=True, separators=(",", ":"), ensure_ascii=False)
    found = [] if hashlib.sha256(plain.encode()).hexdigest() == said else ["digest of night.json"]
    listed = {"night.json"}
    for stage in state["stages"].values():
        for name, digest in stage["files"].items():
            listed.add(name)
            path = folder / name
            if not path.is_file() or hashlib.sha256(path.read_bytes()).hexdigest() != digest:
                found.append(name)
    there = {p.relative_to(folder).as_posix() for p in folder.rglob("*") if p.is_file()}
    return [*found, *sorted(there - listed)]


def hidden_in(*folders: Path) -> list[str]:
    """Hidden files and folders, other than the locks."""
    paths = [path for folder in folders for path in folder.rglob(".*")]
    return [str(path) for path in paths if path.name != ".nightly.lock"]


def _timeless(path: Path) -> bytes:
    try:
        state = json.loads(path.read_text(encoding="utf-8"))
    except ValueError:
        return path.read_bytes()
    state.pop("digest", None)
    for stage in state["stages"].values():
        stage.pop("seconds", None)
    return json.dumps(state, sort_keys=True).encode()


def _write(path: Path, epoch: str, hours, fields, reference: bool = False) -> None:
    """A file of some fields, compressed, put in place at one stroke."""
    path.parent.mkdir(parents=True, exist_ok=True)
    aside = path.with_suffix(".new")
    with netCDF4.Dataset(aside, "w") as file:
        axes = {"time": hours, "latitude": LATITUDES, "longitude": LONGITUDES}
        units = {"time": f"hours since {epoch}", "latitude": "degrees_north",
                 "longitude": "degrees_east"}  # fmt: skip
        for name, values in axes.items():
            file.createDimension(name, len(values))
            variable = file.createVariable(name, "f8", (name,))
            variable.setncatts({"standard_name": name, "units": units[name]})
            variable[:] = values
        if reference:
            variable = file.createVariable("reference", "f8")
            variable.setncatts({"standard_name": "forecast_reference_time", "units": units["time"]})
            variable[...] = 0.0
        for name, values in fields.items():
            variable = file.createVariable(name, "f8", tuple(axes), zlib=True)
            variable.units = "K"
            variable[:] = values
    aside.replace(path)
