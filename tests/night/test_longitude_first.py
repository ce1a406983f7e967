"""Files whose longitude runs slower than their latitude mean the same places."""

import csv

import numpy as np
import pytest
import xarray as xr
from click.testing import CliRunner

import ensemble_horizon as eh
from ensemble_horizon.cli.main import group

SETTINGS = """
[runs]
files = "{name}.nc"
[variables.t]
criteria = [{{ tolerance = 1.0 }}]
[regions.South]
south = -40
north = -20
west = 0
east = 30
[sites.Quay]
latitude = 40
longitude = 50
[products]
folder = "{name}"
figures = false
"""


@pytest.fixture(scope="module")
def folder(tmp_path_factory):
    # Errors grow at a rate that depends on latitude and longitude.
    folder = tmp_path_factory.mktemp("order")
    latitude, longitude = np.arange(-40.0, 41.0, 20.0), np.arange(0.0, 61.0, 10.0)
    lead = np.arange(0.0, 49.0, 6.0)
    rate = 0.02 + 0.0005 * (latitude[:, None] + 40) + 0.0002 * longitude
    noise = np.random.default_rng(8).normal(size=(10, 1, 5, 7))
    values = 0.1 * noise * np.exp(rate * lead[:, None, None])
    data = xr.Dataset(
        {"t": (("member", "lead", "latitude", "longitude"), values, {"units": "K"})},
        coords={
            "member": ("member", np.arange(10), {"standard_name": "realization"}),
            "lead": ("lead", lead, {"standard_name": "forecast_period", "units": "hours"}),
            "latitude": ("latitude", latitude, {"units": "degrees_north"}),
            "longitude": ("longitude", longitude, {"units": "degrees_east"}),
            "start": ((), np.datetime64("2031-02-14", "ns"),
                      {"standard_name": "forecast_reference_time"}),
        },
    )  # fmt: skip
    data.to_netcdf(folder / "usual.nc")
    data.transpose("member", "lead", "longitude", "latitude").to_netcdf(folder / "turned.nc")
    return folder


def estimated(folder, name):
    config = folder / f"{name}.toml"
    config.write_text(SETTINGS.format(name=name), encoding="utf-8")
    result = CliRunner().invoke(group, ["estimate", str(config)], catch_exceptions=False)
    assert result.exit_code == 0, result.stderr
    with (folder / name / "horizons.csv").open(encoding="utf-8") as file:
        rows = list(csv.DictReader(file))
    with xr.open_dataset(folder / name / "horizon_maps.nc") as maps:
        return rows, maps.load()


def test_the_same_limits_at_the_same_places(folder):
    (rows, maps), (turned, turned_maps) = (estimated(folder, name) for name in ("usual", "turned"))
    assert {row["place"] for row in rows} == {"South", "Quay"}
    assert rows == turned
    name = next(str(key) for key in maps.data_vars if str(key).endswith("horizon"))
    assert maps[name].dims == turned_maps[name].dims
    assert np.array_equal(maps[name], turned_maps[name], equal_nan=True)


def test_both_open_alike(folder):
    usual, turned = (eh.open_runs(str(folder / f"{name}.nc")).t for name in ("usual", "turned"))
    assert turned.dims == usual.dims
    assert np.array_equal(usual, turned)
