"""A real seasonal ensemble through the whole night: GloSea4, from the package iris-sample-data.

Thirteen members started on different days (a lagged ensemble), six monthly leads, member 6
missing; surface temperature on 145 x 192 points.
"""

import csv

import numpy as np
import pytest
import xarray as xr
from click.testing import CliRunner

from ensemble_horizon.cli.main import group

SETTINGS = """
[runs]
files = "{files}"
members = 14
lagged = true
[variables.temperature]
source = "surface_temperature"
units = "degC"
plausible = [-100, 70]
criteria = [{{ tolerance = 1.5 }}, {{ name = "half", saturation_fraction = 0.5 }}]
[regions.tropics]
south = -20
north = 20
[regions."northern extratropics"]
south = 20
[sites.ridge]
latitude = 30.0
longitude = -40.0
[products]
folder = "products"
"""


@pytest.fixture(scope="module")
def night(glosea4_files, tmp_path_factory):
    folder = tmp_path_factory.mktemp("glosea4_night")
    template = glosea4_files[0].parent / "ensemble_{member:03d}.nc"
    settings = folder / "settings.toml"
    settings.write_text(SETTINGS.format(files=template))
    result = CliRunner().invoke(group, ["estimate", str(settings)])
    assert result.exit_code == 0, result.output
    return settings, result


def stacked(files):
    """Members at the valid months common to all, read without the package."""
    fields, times = [], []
    for path in files:
        with xr.open_dataset(path, decode_timedelta=False) as data:
            fields.append(data["surface_temperature"].load().values.astype(float))
            times.append(data["time"].values)
    assert all(np.array_equal(times[0], other) for other in times)
    return np.stack(fields)


def test_survey_names_the_missing_member(night):
    settings, _ = night
    result = CliRunner().invoke(group, ["survey", str(settings), "--headers-only"])
    assert result.exit_code == 0
    assert "usable without member 6" in result.output


def test_spread_of_regions_and_sites_is_that_of_numpy(night, glosea4_files):
    settings, _ = night
    values = stacked(glosea4_files)
    variance = values.var(axis=0, ddof=1)
    with xr.open_dataset(glosea4_files[0], decode_timedelta=False) as data:
        latitude, longitude = data["latitude"].values, data["longitude"].values
    weights = np.cos(np.radians(latitude)) * (np.abs(latitude) <= 20)
    tropics = np.sqrt((variance.mean(axis=2) @ weights) / weights.sum())
    row = np.abs(latitude - 30).argmin()
    column = np.abs((longitude + 40 + 180) % 360 - 180).argmin()
    with xr.open_dataset(settings.parent / "products/horizons.nc", decode_timedelta=False) as found:
        spread = found["temperature_spread"].isel(start=0)
        names = list(found["place_name"].values.astype(str))
        np.testing.assert_allclose(spread[names.index("tropics")], tropics, rtol=1e-5)
        site = np.sqrt(variance[:, row, column])
        np.testing.assert_allclose(spread[names.index("ridge")], site, rtol=1e-5)


def test_maps_hold_a_status_at_every_point(night, glosea4_files):
    settings, _ = night
    variance = stacked(glosea4_files).var(axis=0, ddof=1)
    with xr.open_dataset(
        settings.parent / "products/horizon_maps.nc", decode_timedelta=False, mask_and_scale=False
    ) as found:
        status = found["temperature_status"].values[0, 0]
        horizon = found["temperature_horizon"].values[0, 0]
    assert status.shape == variance.shape[1:]
    assert set(np.unique(status)) <= {0, 1, 2, 3}
    np.testing.assert_array_equal(status == 2, np.sqrt(variance[0]) >= 1.5)
    never = np.sqrt(variance).max(axis=0) < 1.5
    assert np.isin(status[never], [1, 3]).all()
    reached = (np.sqrt(variance[0]) < 1.5) & ~never
    np.testing.assert_array_equal(status == 0, reached)
    assert np.isfinite(horizon[reached]).all()


def test_table_and_pictures_are_there(night):
    settings, result = night
    with (settings.parent / "products/horizons.csv").open() as file:
        rows = list(csv.DictReader(file))
    assert len(rows) == 6
    assert {row["members"] for row in rows} == {"13"}
    for row in rows:
        assert (row["horizon"] != "") == (row["status"] == "reached")
    assert len(list((settings.parent / "products/figures").glob("*.png"))) == 3
    assert "official warnings" in result.output
