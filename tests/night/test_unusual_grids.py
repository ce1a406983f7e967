"""Point series without space, unstructured cells, and grids with 2-D latitude and longitude."""

import numpy as np
import pytest
import xarray as xr

HOURS = 12.0 * np.arange(12)


def write(night, values, dims, coords):
    """Members m00.nc, ... with the given spatial dimensions and coordinates."""
    start = np.datetime64("2031-02-14", "ns")
    time = start + (HOURS * 3.6e12).astype("timedelta64[ns]")
    for number, field in enumerate(values):
        data = xr.Dataset(
            {"t2": (("time", *dims), field, {"units": "K"})},
            coords={
                "time": ("time", time, {"standard_name": "time"}),
                "forecast_reference_time": (
                    (), start, {"standard_name": "forecast_reference_time"},
                ),
                **coords,
            },
        )  # fmt: skip
        for name in ("time", "forecast_reference_time"):
            data[name].encoding = {"units": "hours since 2031-02-14", "dtype": "f8"}
        data.to_netcdf(night.member(number))


def place(values, dims):
    names = ("latitude", "degrees_north"), ("longitude", "degrees_east")
    return {
        name: (dims, value, {"standard_name": name, "units": units})
        for (name, units), value in zip(names, values, strict=True)
    }


def test_a_point_series_without_space(night, growing):
    values = growing(shape=())
    write(night, values, (), {})
    night.settings()
    (row,) = night.estimated()
    assert row["status"] == "reached"
    np.testing.assert_allclose(night.spread()[0], values.std(axis=0, ddof=1), rtol=1e-6)


def test_a_point_series_with_figures_and_maps_left_to_the_tool(night, growing):
    write(night, growing(shape=()), (), {})
    night.settings(products="")
    (row,) = night.estimated()
    assert row["status"] == "reached"
    assert [path for path in night.written() if path.endswith("curves_20310214T00.png")]


@pytest.mark.parametrize(
    "places",
    ["[regions.north]\nsouth = 45", "[sites.north]\nlatitude = 54.1\nlongitude = 6.4"],
)
def test_a_region_or_site_of_runs_without_space_is_refused(night, growing, refusal, places):
    write(night, growing(shape=()), (), {})
    night.settings(more=places)
    refusal(night.estimate(), 2, "north", "without space")
    assert night.written() == []


def cells(growing):
    rng = np.random.default_rng(8)
    latitude, longitude = rng.uniform(40, 65, 30), rng.uniform(-10, 25, 30)
    values = growing(shape=(30,))
    values = 280 + (values - 280) * rng.uniform(0.5, 2.0, 30)
    return values, latitude, longitude


def test_unstructured_cells(night, growing):
    values, latitude, longitude = cells(growing)
    write(night, values, ("cell",), place((latitude, longitude), ("cell",)))
    night.settings(
        more="[regions.north]\nsouth = 50\n"
        f"[sites.tower]\nlatitude = {latitude[7]:.4f}\nlongitude = {longitude[7]:.4f}"
    )
    result = night.estimate()
    assert result.exit_code == 0, result.stderr
    north, tower = night.spread()
    variance = values.var(axis=0, ddof=1)
    inside = latitude > 50
    # Cells without areas count alike, or by the cosine of latitude; the message says which.
    alike = np.sqrt(variance[:, inside].mean(axis=1))
    weights = np.cos(np.deg2rad(latitude[inside]))
    cosine = np.sqrt((variance[:, inside] * weights).sum(axis=1) / weights.sum())
    assert np.allclose(north, alike, rtol=1e-6) or np.allclose(north, cosine, rtol=1e-6)
    np.testing.assert_allclose(tower, values[:, :, 7].std(axis=0, ddof=1), rtol=1e-6)


def test_unstructured_cells_with_maps_and_figures(night, growing):
    values, latitude, longitude = cells(growing)
    write(night, values, ("cell",), place((latitude, longitude), ("cell",)))
    night.settings(products="")
    night.estimated()
    with xr.open_dataset(night.products / "horizon_maps.nc", decode_times=False) as data:
        assert data["t2_horizon"].squeeze().shape == (30,)
        assert np.isfinite(data["t2_horizon"]).all()


def curvilinear():
    y, x = np.mgrid[0:6, 0:8]
    return 40 + 4.0 * y + 0.5 * x, -10 + 4.0 * x - 0.8 * y


def test_two_dimensional_latitude_and_longitude(night, growing):
    latitude, longitude = curvilinear()
    values = growing()
    values = 280 + (values - 280) * np.random.default_rng(2).uniform(0.5, 2, (6, 8))
    write(night, values, ("y", "x"), place((latitude, longitude), ("y", "x")))
    night.settings(
        more="[regions.north]\nsouth = 50.2\n"
        f"[sites.tower]\nlatitude = {latitude[2, 5]}\nlongitude = {longitude[2, 5]}"
    )
    result = night.estimate()
    assert result.exit_code == 0, result.stderr
    north, tower = night.spread()
    np.testing.assert_allclose(tower, values[:, :, 2, 5].std(axis=0, ddof=1), rtol=1e-6)
    variance = values.var(axis=0, ddof=1)
    inside = latitude > 50.2
    known = [
        np.sqrt((variance * weights).sum(axis=(1, 2)) / weights.sum())
        for weights in (inside * 1.0, inside * np.cos(np.deg2rad(latitude)))
    ]
    assert any(np.allclose(north, one, rtol=1e-6) for one in known)


def test_two_dimensional_latitude_and_longitude_with_maps(night, growing):
    write(night, growing(), ("y", "x"), place(curvilinear(), ("y", "x")))
    night.settings(products="")
    night.estimated()
    with xr.open_dataset(night.products / "horizon_maps.nc", decode_times=False) as data:
        assert data["t2_horizon"].squeeze().shape == (6, 8)
        np.testing.assert_allclose(data["latitude"].values, curvilinear()[0])


@pytest.mark.parametrize("first", [0.0, -180.0])
def test_a_site_is_found_in_either_counting_of_longitude(night, growing, first):
    values = growing()
    values = 280 + (values - 280) * np.random.default_rng(2).uniform(0.5, 2, (6, 8))
    longitudes = first + 45.0 * np.arange(8)
    night.write(values, longitudes=longitudes)
    night.settings(more="[sites.west]\nlatitude = 50\nlongitude = -45")
    night.estimated()
    column = int(np.flatnonzero((longitudes + 45) % 360 == 0)[0])
    np.testing.assert_allclose(
        night.spread()[0], values[:, :, 3, column].std(axis=0, ddof=1), rtol=1e-6
    )
