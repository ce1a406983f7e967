"""Fixtures of general use: small runs written to disk, and a real seasonal ensemble."""

from __future__ import annotations

import os
import warnings
from collections.abc import Callable
from pathlib import Path

# Before numpy is loaded: the matrices are small, and test workers share the cores.
os.environ.setdefault("OPENBLAS_NUM_THREADS", "1")

import numpy as np
import pytest
import xarray as xr

from ensemble_horizon.runs import close_files

# Collected for doctests they would be taken for one another.
collect_ignore_glob = ["conftest.py", "*/conftest.py"]

Truth = np.ndarray


@pytest.fixture(autouse=True)
def _no_open_files():
    yield
    close_files()


@pytest.fixture
def truth() -> Truth:
    """Values (member 3, lead 4, latitude 5, longitude 6), float32, no two alike."""
    rng = np.random.default_rng(20240105)
    return rng.normal(280.0, 5.0, (3, 4, 5, 6)).astype("f4")


@pytest.fixture
def run_dataset() -> Callable[..., xr.Dataset]:
    """A function that builds one run: dimensions (time, latitude, longitude), CF attributes."""

    def build(
        values: np.ndarray,
        *,
        start: str = "2024-01-05T00:00",
        leads: tuple[float, ...] | None = None,
        name: str = "t2m",
        units: str = "K",
        member: int | None = None,
        south_first: bool = False,
        first_longitude: float = 0.0,
    ) -> xr.Dataset:
        count, rows, columns = values.shape
        hours = np.asarray(leads if leads is not None else 6.0 * np.arange(1, count + 1))
        reference = np.datetime64(start, "ns")
        valid = reference + (hours * 3.6e12).astype("timedelta64[ns]")
        latitude = np.linspace(80.0, -80.0, rows)
        data = xr.Dataset(
            {name: (("time", "latitude", "longitude"), values, {"units": units})},
            coords={
                "time": ("time", valid, {"standard_name": "time"}),
                "latitude": (
                    "latitude",
                    latitude[::-1] if south_first else latitude,
                    {"standard_name": "latitude", "units": "degrees_north"},
                ),
                "longitude": (
                    "longitude",
                    first_longitude + np.arange(columns) * 360.0 / columns,
                    {"standard_name": "longitude", "units": "degrees_east"},
                ),
                "forecast_reference_time": (
                    (), reference, {"standard_name": "forecast_reference_time"},
                ),
            },
        )  # fmt: skip
        if member is not None:
            data = data.assign_coords(realization=((), member, {"standard_name": "realization"}))
        for time in ("time", "forecast_reference_time"):
            data[time].encoding = {"units": "hours since 2024-01-01", "dtype": "f8"}
        return data

    return build


@pytest.fixture
def member_files(tmp_path, truth, run_dataset) -> list[Path]:
    """One file per member: m00.nc, m01.nc, m02.nc, with the numbers only in the names."""
    paths = []
    for number, values in enumerate(truth):
        path = tmp_path / f"m{number:02d}.nc"
        run_dataset(values).to_netcdf(path)
        paths.append(path)
    return paths


@pytest.fixture(scope="session")
def glosea4_cubes() -> dict[int, object]:
    """The real seasonal ensemble of the package iris-sample-data, read with iris, by member."""
    iris = pytest.importorskip("iris")
    sample = pytest.importorskip("iris_sample_data")
    folder = Path(sample.path) / "GloSea4"
    cubes = {}
    with warnings.catch_warnings():
        warnings.simplefilter("ignore")
        for path in sorted(folder.glob("ensemble_*.pp")):
            cubes[int(path.stem[-3:])] = cube = iris.load_cube(str(path))
            cube.data  # noqa: B018 - reads the values now, with its warnings off
    return cubes


@pytest.fixture(scope="session")
def glosea4_files(glosea4_cubes, tmp_path_factory) -> list[Path]:
    """The same ensemble as NetCDF, one file per member: ensemble_000.nc to ensemble_013.nc."""
    import iris

    folder = tmp_path_factory.mktemp("glosea4")
    paths = []
    with warnings.catch_warnings():
        warnings.simplefilter("ignore")
        for number, cube in glosea4_cubes.items():
            path = folder / f"ensemble_{number:03d}.nc"
            iris.save(cube, str(path))
            paths.append(path)
    return paths
