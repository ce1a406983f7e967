"""A small night on disk, and the commands run on it as a forecaster would run them."""

from __future__ import annotations

import csv
import re
from collections.abc import Callable, Sequence
from pathlib import Path

import netCDF4
import numpy as np
import pytest
import xarray as xr
from click.testing import CliRunner, Result

from ensemble_horizon.cli.main import group

HOURS = 12.0 * np.arange(12)
LATITUDES = np.linspace(65.0, 40.0, 6)
LONGITUDES = np.linspace(-10.0, 25.0, 8)
LOG_LINE = re.compile(r"^\d{4}-\d\d-\d\d \d\d:\d\d:\d\d,\d{3} (INFO|WARNING|ERROR) ")


def logistic(hours: np.ndarray, first: float = 0.1, last: float = 4.0, rate: float = 0.06):
    """Error growth of the logistic law, E' = rate E (1 - E / last)."""
    return last / (1 + (last / first - 1) * np.exp(-rate * hours))


def growing(
    size: np.ndarray | None = None,
    *,
    members: int = 6,
    shape: tuple[int, ...] = (6, 8),
    mean: float = 280.0,
    seed: int = 3,
) -> np.ndarray:
    """Values (member, lead, *shape) whose spread at every point is ``size`` by lead, exactly."""
    size = logistic(HOURS) if size is None else np.asarray(size, float)
    pattern = np.random.default_rng(seed).normal(size=(members, 1, *shape))
    pattern -= pattern.mean(axis=0)
    pattern /= pattern.std(axis=0, ddof=1)
    return mean + pattern * size.reshape(1, -1, *[1] * len(shape))


def write_member(
    path: Path,
    fields: dict[str, np.ndarray],
    *,
    units: str = "K",
    start: str = "2031-02-14 00:00",
    hours: Sequence[float] | None = None,
    latitudes: np.ndarray = LATITUDES,
    longitudes: np.ndarray = LONGITUDES,
    realization: int | None = None,
) -> Path:
    """One member: variables (time, latitude, longitude) with CF attributes, 64 bits."""
    count = next(iter(fields.values())).shape[0]
    path.parent.mkdir(parents=True, exist_ok=True)
    with netCDF4.Dataset(path, "w") as file:
        file.createDimension("time", count)
        _axis(file, "latitude", latitudes, "degrees_north")
        _axis(file, "longitude", longitudes, "degrees_east")
        for name, dims, values in (
            ("time", ("time",), HOURS[:count] if hours is None else hours),
            ("forecast_reference_time", (), 0.0),
        ):
            variable = file.createVariable(name, "f8", dims)
            variable.setncatts({"standard_name": name, "units": f"hours since {start}"})
            variable[...] = values
        if realization is not None:
            variable = file.createVariable("realization", "i4", ())
            variable.setncatts({"standard_name": "realization", "units": "1"})
            variable[...] = realization
        for name, values in fields.items():
            variable = file.createVariable(
                name, "f8", ("time", "latitude", "longitude"), fill_value=-9999.0
            )
            variable.units = units
            variable[:] = np.ma.masked_invalid(values)
    return path


def _axis(file: netCDF4.Dataset, name: str, values: np.ndarray, units: str) -> None:
    file.createDimension(name, len(values))
    variable = file.createVariable(name, "f8", (name,))
    variable.setncatts({"standard_name": name, "units": units})
    variable[:] = values


class Night:
    """A folder with members, a settings file, and what the commands said about them."""

    def __init__(self, folder: Path) -> None:
        self.folder = folder
        self.products = folder / "out"
        self.files = str(folder / "m{member:02d}.nc")
        self.config = folder / "settings.toml"

    def member(self, number: int) -> Path:
        return self.folder / f"m{number:02d}.nc"

    def write(
        self, values: np.ndarray | None = None, name: str = "t2", numbered: bool = False, **options
    ) -> np.ndarray:
        """Members m00.nc, m01.nc, ... from values (member, lead, latitude, longitude)."""
        values = growing() if values is None else values
        for number, fields in enumerate(values):
            realization = number if numbered else None
            write_member(self.member(number), {name: fields}, realization=realization, **options)
        return values

    def settings(
        self,
        variables: str = "[variables.t2]\ncriteria = [{tolerance = 1.5}]",
        *,
        runs: str = "",
        files: str = "m{member:02d}.nc",
        products: str = 'maps = "none"\nfigures = false',
        folder: str = "out",
        more: str = "",
    ) -> Path:
        """Write the settings file; maps and figures are off unless asked for."""
        self.config.write_text(
            f'[runs]\nfiles = "{files}"\n{runs}\n{variables}\n{more}\n'
            f'[engine]\nworkers = 1\n[products]\nfolder = "{folder}"\n{products}\n',
            encoding="utf-8",
        )
        return self.config

    def run(self, *arguments: object) -> Result:
        return CliRunner().invoke(group, [str(item) for item in arguments], catch_exceptions=False)

    def estimate(self, *options: str) -> Result:
        return self.run("estimate", self.config, *options)

    def estimated(self, *options: str) -> list[dict[str, str]]:
        """Rows of the CSV of an estimate that must succeed."""
        result = self.estimate(*options)
        assert result.exit_code == 0, result.stderr
        assert "Traceback" not in result.stderr
        return self.rows()

    def rows(self) -> list[dict[str, str]]:
        with (self.products / "horizons.csv").open(newline="", encoding="utf-8") as file:
            return list(csv.DictReader(file))

    def curves(self) -> xr.Dataset:
        with xr.open_dataset(self.products / "horizons.nc", decode_times=False) as data:
            return data.load()

    def spread(self, variable: str = "t2") -> np.ndarray:
        """Spread (place, lead) of the only start."""
        found = self.curves()[f"{variable}_spread"].squeeze("start")
        return found.transpose("place", "lead").values

    def written(self) -> list[str]:
        """Everything below the product folder, and neighbours whose name begins like it."""
        return sorted(
            str(path.relative_to(self.folder))
            for path in self.folder.rglob("*")
            if str(path.relative_to(self.folder)).lstrip(".").startswith("out")
        )


def refusal(result: Result, status: int, *words: str) -> str:
    """The one message of a command that refused; it must hold every one of the words."""
    assert result.exit_code == status, (result.exit_code, result.stdout, result.stderr)
    assert "Traceback" not in result.stderr
    lines = [line for line in result.stderr.splitlines() if not LOG_LINE.match(line)]
    text = "\n".join(lines)
    assert text.startswith("ensemble-horizon: "), result.stderr
    assert text.count("ensemble-horizon: ") == 1, result.stderr
    assert re.fullmatch(
        r"ensemble-horizon: .+?: expected .+?; found .+[.?] Next: [^.\n].*[.?]", text, re.DOTALL
    ), text
    for word in words:
        assert word in text, f"{word!r} is not in {text!r}"
    return text


@pytest.fixture
def night(tmp_path: Path) -> Night:
    """An empty folder for a night."""
    return Night(tmp_path)


@pytest.fixture(name="growing")
def _growing() -> Callable[..., np.ndarray]:
    return growing


@pytest.fixture(name="logistic")
def _logistic() -> Callable[..., np.ndarray]:
    return logistic


@pytest.fixture(name="write_member")
def _write_member() -> Callable[..., Path]:
    return write_member


@pytest.fixture(name="refusal")
def _refusal() -> Callable[..., str]:
    return refusal


@pytest.fixture
def nightly(tmp_path, monkeypatch):
    """Runs of two starts for the nightly chain, with a page that is made at once."""
    from nightly_archive import MADE, Nightly, light_briefing

    monkeypatch.setenv("SOURCE_DATE_EPOCH", MADE)
    monkeypatch.setattr("ensemble_horizon.night.chain.closing.write_briefing", light_briefing)
    made = Nightly(tmp_path)
    made.write(13, 14)
    made.settings()
    return made
