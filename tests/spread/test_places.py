"""Regions, sites and area means."""

import numpy as np
import pytest
import xarray as xr

import ensemble_horizon as eh
from ensemble_horizon.spread.places import great_circle_km, nearest_point, region_weights


def globe(step=10.0, north_first=False, west=0.0):
    latitude = np.arange(-90 + step / 2, 90, step)
    if north_first:
        latitude = latitude[::-1]
    longitude = west + np.arange(0, 360, step)
    return latitude, longitude


def field(latitude, longitude, values):
    return xr.DataArray(
        values,
        dims=("latitude", "longitude"),
        coords={"latitude": latitude, "longitude": longitude},
    )


def test_area_mean_of_a_parallel_dependent_field_equals_its_integral():
    # Mean of sin^2(latitude) over the sphere is 1/3 (calculus).
    latitude, longitude = globe(1.0)
    size = np.abs(np.sin(np.radians(latitude)))[:, np.newaxis] * np.ones(longitude.size)
    found = eh.area_curve(field(latitude, longitude, size))
    assert float(found) == pytest.approx(np.sqrt(1 / 3), rel=1e-3)


@pytest.mark.parametrize("north_first", [False, True])
@pytest.mark.parametrize("west", [0.0, -180.0])
def test_row_order_and_longitude_convention_change_nothing(north_first, west):
    latitude, longitude = globe(10.0, north_first, west)
    size = 2 + np.sin(np.radians(latitude))[:, None] * np.cos(np.radians(longitude))[None]
    region = eh.Region("box", south=-30, north=40, west=150, east=-120)
    found = eh.area_curve(field(latitude, longitude, size), region=region)
    lat, lon = globe(10.0)
    base = 2 + np.sin(np.radians(lat))[:, None] * np.cos(np.radians(lon))[None]
    inside = ((lat >= -30) & (lat <= 40))[:, None] & ((lon >= 150) & (lon <= 240))[None]
    weights = np.cos(np.radians(lat))[:, None] * inside
    assert float(found) == pytest.approx(np.sqrt((weights * base**2).sum() / weights.sum()))


def test_starts_are_pooled_as_variances():
    curve = xr.DataArray(
        [[[3.0]], [[4.0]]],
        dims=("start", "latitude", "longitude"),
        coords={"latitude": [0.0], "longitude": [0.0]},
    )
    assert float(eh.area_curve(curve, over_starts=True)) == pytest.approx(np.sqrt(12.5))


def test_points_without_a_value_do_not_count():
    latitude, longitude = globe(30.0)
    size = np.ones((latitude.size, longitude.size))
    size[0] = np.nan
    assert float(eh.area_curve(field(latitude, longitude, size))) == pytest.approx(1.0)


def test_a_region_off_the_grid_is_refused_by_name():
    latitude, longitude = np.array([10.0, 20.0]), np.array([5.0, 6.0])
    with pytest.raises(eh.ArgumentError, match="region 'pole': expected at least one grid point"):
        region_weights(eh.Region("pole", south=80), latitude, longitude)


@pytest.mark.parametrize(
    ("box", "words"),
    [({"south": 20, "north": 10}, "south < north"), ({"west": 5, "east": 5}, "to differ")],
)
def test_impossible_boxes_are_refused(box, words):
    with pytest.raises(eh.ArgumentError, match=words):
        eh.Region("box", **box)


def test_great_circle_against_known_arcs():
    # One degree of a meridian on a sphere of 6371 km is 111.195 km (arithmetic).
    assert float(great_circle_km(0, 0, 1, 0)) == pytest.approx(111.195, abs=1e-3)
    assert float(great_circle_km(0, 179.5, 0, -179.5)) == pytest.approx(111.195, abs=1e-3)


def test_the_nearest_point_is_found_across_the_date_line():
    latitude, longitude = np.zeros(4), np.array([0.0, 90.0, 180.0, 270.0])
    index, distance = nearest_point(eh.Site("buoy", 0.0, -179.0), latitude, longitude)
    assert index == 2
    assert distance == pytest.approx(111.195, abs=1e-3)


def test_a_site_off_the_grid_is_refused_with_the_distance():
    latitude, longitude = np.array([50.0, 50.0, 51.0]), np.array([0.0, 1.0, 0.0])
    with pytest.raises(eh.ArgumentError, match=r"site 'far': expected a grid point within"):
        nearest_point(eh.Site("far", 40.0, 0.0), latitude, longitude)


def test_edges_of_a_region_hold_in_single_precision():
    region = eh.Region("bay", south=35.1, north=36.1, west=-10.1, east=-9.1)
    latitude = np.array([35.1, 36.1], dtype=np.float32).astype(float)
    longitude = np.array([349.9, 350.9], dtype=np.float32).astype(float)
    assert region.contains(latitude, longitude).all()
    assert not region.contains(35.5, 349.89)


def test_a_region_of_no_width_is_refused():
    with pytest.raises(eh.ArgumentError, match="one and the same meridian"):
        eh.Region("line", west=180, east=-180)
    assert eh.Region("circle", west=-180, east=180).contains(0.0, 12.0)


def test_a_site_is_never_placed_on_a_hole_of_the_grid():
    latitude = np.array([np.nan, 10.0, 11.0])
    index, distance = nearest_point(eh.Site("pier", 10.0, 10.0), latitude, latitude)
    assert (index, distance) == (1, 0.0)
