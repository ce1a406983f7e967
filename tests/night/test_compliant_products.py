"""Products of a typical estimate, maps included, against the CF-1.11 suite of the checker."""

import subprocess
import sys
from pathlib import Path

import pytest
import xarray as xr

VARIABLES = """
[variables."wind speed"]
speed = ["u10", "v10"]
units = "m s-1"
hold = 12
criteria = [
    {name = "crane work", tolerance = "3 knot"}, {saturation_fraction = 0.5},
    {chance = {beyond = 2.0, probability = 0.2}},
]
[variables.t2]
units = "degC"
criteria = [{tolerance = 1.5}]
"""
PLACES = "[regions.north]\nsouth = 52\n[sites.tower]\nlatitude = 50\nlongitude = 0"


def complaints(path: Path) -> str:
    """What the open compliance checker (suite cf:1.11) prints; empty where it passes."""
    pytest.importorskip("compliance_checker")
    program = "from cchecker import main; import sys; sys.exit(main())"
    tool = Path(sys.executable).with_name("compliance-checker")
    command = [str(tool)] if tool.exists() else [sys.executable, "-c", program]
    done = subprocess.run(
        [*command, "--test", "cf:1.11", "--criteria", "lenient", str(path)],
        capture_output=True, text=True, check=False,
    )  # fmt: skip
    passed = done.returncode == 0 and "All tests passed!" in done.stdout
    return "" if passed else done.stdout + done.stderr


@pytest.fixture
def products(night, growing, write_member):
    t2, u, v = growing(seed=1), growing(seed=2, mean=3.0), growing(seed=3, mean=-2.0)
    t2[:, :, 1, 1:3] = float("nan")
    for number in range(6):
        write_member(night.member(number), {"u10": u[number], "v10": v[number]}, units="m s-1")
        import netCDF4
        import numpy as np

        with netCDF4.Dataset(night.member(number), "a") as file:
            field = file.createVariable(
                "t2", "f8", ("time", "latitude", "longitude"), fill_value=-9999.0
            )
            field.units = "K"
            field[:] = np.ma.masked_invalid(t2[number])
    night.settings(VARIABLES, more=PLACES, products='maps = "each"\nfigures = false')
    night.estimated()
    return night.products


@pytest.mark.slow
@pytest.mark.parametrize("name", ["horizons.nc", "horizon_maps.nc"])
def test_products_comply_with_cf(products, name):
    assert complaints(products / name) == ""


@pytest.mark.parametrize("name", ["horizons.nc", "horizon_maps.nc"])
def test_products_name_their_origin(products, name):
    with xr.open_dataset(products / name, decode_times=False) as data:
        assert data.attrs["Conventions"] == "CF-1.11"
        assert "m00.nc" in data.attrs["inputs"]
        assert 'units = "degC"' in data.attrs["settings"]
        assert data.attrs["software_version"]
        assert data["start"].attrs["standard_name"] == "forecast_reference_time"
        flags = [n for n in data.data_vars if str(n).endswith("_status")]
        assert len(flags) == 2
        for flag in flags:
            assert data[flag].attrs["flag_meanings"].split() == [
                "reached", "beyond_run", "at_start", "no_growth", "no_data",
            ]  # fmt: skip


def test_maps_hold_the_horizon_of_every_point_and_nothing_in_the_mask(products):
    with xr.open_dataset(products / "horizon_maps.nc", decode_times=False) as data:
        status = data["t2_status"].squeeze()
        horizon = data["t2_horizon"].squeeze()
        assert (status[1, 1:3] == 4).all()
        assert horizon[1, 1:3].isnull().all()
        assert int((status == 0).sum()) == 46
        assert int(horizon.notnull().sum()) == 46
        # The spread of every point follows the same logistic law, E = 1.5 at 51.7 h.
        assert float(horizon.min()) == pytest.approx(51.7, abs=2.0)
        assert float(horizon.max()) == pytest.approx(51.7, abs=2.0)
