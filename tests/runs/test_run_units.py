"""Units (UDUNITS) and fields beside the runs."""

import numpy as np
import pytest
import xarray as xr

from ensemble_horizon.errors import InputError, SettingsError
from ensemble_horizon.runs import converter, difference_scale, open_field, read_catalogue
from ensemble_horizon.runs.units import same_units


@pytest.mark.parametrize(
    ("source", "target", "scale", "offset"),
    [
        ("K", "degC", 1.0, -273.15),
        ("degF", "K", 5 / 9, 273.15 - 32 * 5 / 9),
        ("m s-1", "km h-1", 3.6, 0.0),
        ("knot", "m s-1", 1852 / 3600, 0.0),
        ("Pa", "hPa", 0.01, 0.0),
        ("kg m-2", "kg m-2", 1.0, 0.0),
        ("1", "%", 100.0, 0.0),
    ],
)
def test_factors(source, target, scale, offset):
    # Exact definitions: the international knot, the degree Fahrenheit.
    assert converter(source, target) == pytest.approx((scale, offset), rel=1e-12)
    assert difference_scale(source, target) == pytest.approx(scale, rel=1e-12)


@pytest.mark.parametrize(
    ("source", "target", "kind", "words"),
    [
        ("K", "m", SettingsError, "expected units that 'K' converts to; found 'm'"),
        ("K", "kelvinish", SettingsError, "expected units that UDUNITS knows; found 'kelvinish'"),
        ("degrees of warmth", "K", InputError, "found 'degrees of warmth' in the file"),
        ("", "K", InputError, "found no units in the file"),
        ("1", "dB", SettingsError, "dB"),
    ],
)
def test_refusals(source, target, kind, words):
    with pytest.raises(kind) as caught:
        converter(source, target, what="variables.t2m")
    assert str(caught.value).startswith("variables.t2m: expected units")
    assert words in str(caught.value)


def test_spellings():
    assert same_units("hPa", "millibar")
    assert not same_units("K", "degC")
    assert not same_units("K", "nonsense")
    assert same_units("", "")


def field_file(path, values, latitude, extra=()):
    data = xr.Dataset(
        {"sd": ((*extra, "lat", "lon"), values.reshape((1,) * len(extra) + values.shape),
                {"units": "K"})},
        coords={
            "lat": ("lat", latitude, {"units": "degrees_north"}),
            "lon": ("lon", np.arange(6) * 60.0, {"units": "degrees_east"}),
        },
    )  # fmt: skip
    data["value"] = ((), 2.5, {"units": "K"})
    data.to_netcdf(path)


def test_a_field_on_the_grid_of_the_runs(tmp_path, member_files):
    grid = read_catalogue(member_files[0]).grid
    values = np.arange(30.0).reshape(5, 6)
    values[0, 0] = np.nan
    field_file(tmp_path / "sd.nc", values, np.linspace(80, -80, 5), extra=("time",))
    field = open_field(tmp_path / "sd.nc", "sd", grid)
    assert field.dims == ("latitude", "longitude")
    assert field.attrs["units"] == "K"
    np.testing.assert_array_equal(field, values)
    assert float(open_field(tmp_path / "sd.nc", "value", grid)) == 2.5


def test_a_field_on_another_grid_is_refused(tmp_path, member_files):
    grid = read_catalogue(member_files[0]).grid
    field_file(tmp_path / "sd.nc", np.ones((5, 6)), np.linspace(-80, 80, 5))
    with pytest.raises(InputError) as caught:
        open_field(tmp_path / "sd.nc", "sd", grid)
    assert "expected 'sd' on the grid of the runs (5 x 6 points, rectilinear)" in str(caught.value)
    assert "found latitude that differs by up to 160" in str(caught.value)
    assert open_field(tmp_path / "sd.nc", "sd").shape == (5, 6)


def test_a_field_with_several_months_is_refused(tmp_path):
    data = xr.Dataset({"sd": (("month", "lat", "lon"), np.ones((12, 5, 6)))})
    data.to_netcdf(tmp_path / "sd.nc")
    with pytest.raises(InputError, match="as one field, without 'month'; found 12 values"):
        open_field(tmp_path / "sd.nc", "sd")


def test_a_field_that_is_not_there(tmp_path):
    field_file(tmp_path / "sd.nc", np.ones((5, 6)), np.linspace(-80, 80, 5))
    with pytest.raises(InputError, match="expected the variable 'std'; found the variables"):
        open_field(tmp_path / "sd.nc", "std")
    with pytest.raises(InputError, match="found no such file"):
        open_field(tmp_path / "gone.nc", "sd")
