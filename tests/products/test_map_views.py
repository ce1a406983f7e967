"""The grid point under each pixel, against positions worked out by hand or by brute force."""

from __future__ import annotations

import numpy as np
import pytest
import xarray as xr
from synthetic_products import GRIDS, cells, regular, rotated

from ensemble_horizon.errors import ArgumentError
from ensemble_horizon.products.view import map_view, unrolled


def field_of(grid):
    dims, coords, lat, _ = grid
    return xr.DataArray(np.zeros(lat.shape), dims=dims, coords=coords)


def haversine(lat1, lon1, lat2, lon2):
    lat1, lon1, lat2, lon2 = map(np.deg2rad, (lat1, lon1, lat2, lon2))
    a = (
        np.sin((lat2 - lat1) / 2) ** 2
        + np.cos(lat1) * np.cos(lat2) * np.sin((lon2 - lon1) / 2) ** 2
    )
    return 2 * np.arcsin(np.sqrt(a))


@pytest.mark.parametrize("name", ["global", "regional", "date-line", "rotated", "cells", "tiny"])
def test_each_pixel_shows_the_nearest_grid_point(name):
    grid = GRIDS[name]()
    view = map_view(field_of(grid))
    width, height = view.pixel_size(120, 90)
    points = view.grid_points(width, height)
    x, y = view.pixels(width, height)
    lat, lon = grid[2].ravel(), grid[3].ravel()
    rng = np.random.default_rng(1)
    for row, column in zip(rng.integers(0, height, 60), rng.integers(0, width, 60), strict=True):
        found = points[row, column]
        if found < 0:
            continue
        if view.rectilinear:
            turn = np.abs((lon - x[column] + 180) % 360 - 180)
            assert turn[found] <= turn.min() + 1e-6
            assert np.abs(lat[found] - y[row]) <= np.abs(lat - y[row]).min() + 1e-6
        else:
            distance = haversine(lat, lon, y[row], x[column])
            assert distance[found] <= distance.min() + 1e-9


@pytest.mark.parametrize("turn", [0.0, -180.0, 0.25])
@pytest.mark.parametrize("flip", [1, -1])
def test_global_grids_show_the_same_picture_however_they_are_stored(turn, flip):
    latitude = np.arange(-88, 89, 4.0)[::flip]
    longitude = np.arange(0, 360, 4.0) + turn
    view = map_view(field_of(regular(latitude, longitude)))
    assert (view.west, view.east) == (-180.0, 180.0)
    points = view.grid_points(360, 176)
    x, y = view.pixels(360, 176)
    assert (points >= 0).all()
    Y, X = np.meshgrid(latitude, longitude, indexing="ij")
    assert np.abs(Y.ravel()[points] - y[:, None]).max() <= 2.0
    off = (X.ravel()[points] - x[None, :] + 180) % 360 - 180
    assert np.abs(off).max() <= 2.0 + 1e-9
    # North is up.
    assert Y.ravel()[points[0, 0]] == 88


def test_a_region_across_the_date_line_is_one_piece():
    view = map_view(field_of(GRIDS["date-line"]()))
    assert view.west == pytest.approx(165.8) and view.east == pytest.approx(196.0, abs=0.3)
    assert (view.grid_points(200, 150) >= 0).all()


def test_the_turned_grid_is_cut_at_its_rim_and_nowhere_else():
    view = map_view(field_of(rotated(30, 40)))
    points = view.grid_points(300, 260)
    inside = points >= 0
    assert 0.3 < inside.mean() < 0.95
    # No pin holes: a pixel with grid on all four sides has grid itself.
    around = inside[:-2, 1:-1] & inside[2:, 1:-1] & inside[1:-1, :-2] & inside[1:-1, 2:]
    assert (inside[1:-1, 1:-1] | ~around).all()
    assert set(range(30 * 40)) <= set(points[inside].tolist())


def test_cells_of_the_whole_globe_leave_no_gap_and_a_hole_stays_a_hole():
    view = map_view(field_of(cells(3000)))
    assert (view.grid_points(240, 120) >= 0).all()
    dims, _, lat, lon = cells(3000)
    keep = ~((np.abs(lat) < 20) & (np.abs(lon) < 30))
    coords = {"latitude": (dims, lat[keep]), "longitude": (dims, lon[keep])}
    holed = map_view(xr.DataArray(np.zeros(keep.sum()), dims=dims, coords=coords))
    points = holed.grid_points(240, 120)
    assert points[60, 120] == -1 and points[60, 10] >= 0


def test_true_aspect_follows_the_middle_latitude():
    # One degree of longitude at 60 degrees is half as long as at the equator.
    view = map_view(field_of(regular(np.arange(55, 66), np.arange(0, 11))))
    assert view.aspect == pytest.approx(2.0, rel=0.01)
    width, height = view.pixel_size(600, 600)
    assert height / width == pytest.approx(2.0, rel=0.02)
    assert map_view(field_of(GRIDS["global"]())).aspect == pytest.approx(1.0)


def test_longitudes_are_unrolled_after_the_widest_gap():
    values, whole = unrolled(np.array([178.0, 179.0, -180.0, -179.0]))
    np.testing.assert_allclose(values, [178, 179, 180, 181], atol=1e-5)
    assert not whole
    values, whole = unrolled(np.arange(0.0, 360.0, 10.0), plain=True)
    assert whole and values.min() >= -180 and values.max() < 180


@pytest.mark.parametrize("shape", [(1, 1), (1, 5), (5, 1)])
def test_grids_of_one_row_or_column(shape):
    view = map_view(field_of(regular(50 + np.arange(shape[0]), 5 + np.arange(shape[1]))))
    points = view.grid_points(*view.pixel_size(200, 200))
    assert set(points.ravel().tolist()) == set(range(shape[0] * shape[1]))


def test_fields_without_geography_use_their_own_axes():
    plane = xr.DataArray(np.zeros((3, 4)), dims=("y", "x"), coords={"x": [0.0, 2.0, 4.0, 6.0]})
    view = map_view(plane)
    assert not view.geographic and (view.west, view.east) == (-1.0, 7.0)
    ring = map_view(xr.DataArray(np.zeros(40), dims=("site",)))
    assert set(ring.grid_points(*ring.pixel_size(400, 100)).ravel().tolist()) == set(range(40))


def test_fields_that_cannot_be_drawn_are_refused():
    with pytest.raises(ArgumentError, match="one or two dimensions in space"):
        map_view(xr.DataArray(np.zeros((2, 2, 2)), dims=("a", "b", "c")))
    with pytest.raises(ArgumentError, match="transpose the field"):
        map_view(field_of(regular([1.0, 2.0], [3.0, 4.0, 5.0])).T)
    coords = {"latitude": ("cell", [np.nan]), "longitude": ("cell", [np.nan])}
    with pytest.raises(ArgumentError, match="finite latitudes"):
        map_view(xr.DataArray([0.0], dims=("cell",), coords=coords))
