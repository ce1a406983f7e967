"""Spread of positions against closed forms, the textbook haversine, scipy and plain numpy."""

import dask.array
import numpy as np
import pytest
import xarray as xr
from hypothesis import given
from hypothesis import strategies as st
from scipy.spatial.transform import Rotation

import ensemble_horizon as eh
from ensemble_horizon.spread.displacements import PLANE, SPHERE, displacements
from ensemble_horizon.spread.moments import beyond_median
from ensemble_horizon.spread.positions import geometry_of
from ensemble_horizon.spread.reduction import (
    Reduction,
    RegionWeights,
    empty_summary,
    reduce_block,
)

RADIUS = 6_371_000.0
DATE_LINE, POLE, SOUTH_POLE = (12.0, 180.0), (90.0, 0.0), (-90.0, 77.0)
CENTRES = [(0.0, 0.0), (-54.0, 31.0), DATE_LINE, (12.0, -179.999), POLE, SOUTH_POLE]


def around(centre, distance, bearing):
    """Points at distances (m) and bearings (radians, from east) of a centre, by rotations."""
    distance, bearing = np.broadcast_arrays(np.atleast_1d(distance), bearing)
    upright = np.stack([np.cos(bearing), np.sin(bearing), np.zeros(bearing.shape)], axis=-1)
    tilt = (distance / RADIUS)[..., np.newaxis]
    local = np.sin(tilt) * upright + np.cos(tilt) * np.array(
        [0.0, 0.0, 1.0]
    )  # about the north pole
    turned = Rotation.from_euler("yz", [90 - centre[0], centre[1]], degrees=True)
    x, y, z = turned.apply(local.reshape(-1, 3)).T
    place = np.degrees(np.arctan2(z, np.hypot(x, y))), np.degrees(np.arctan2(y, x))
    return tuple(part.reshape(distance.shape) for part in place)


def haversine(latitude, longitude, other_latitude, other_longitude):
    """Great-circle distance in metres (Sinnott 1984, Sky and Telescope, from memory)."""
    first, second = np.radians(latitude), np.radians(other_latitude)
    half = np.sin((second - first) / 2) ** 2
    half += (
        np.cos(first) * np.cos(second) * np.sin(np.radians(other_longitude - longitude) / 2) ** 2
    )
    return 2 * RADIUS * np.arcsin(np.sqrt(half))


def sphere(latitude, longitude, dims=("member",)):
    return (
        xr.DataArray(latitude, dims=dims, attrs={"units": "degrees_north"}),
        xr.DataArray(longitude, dims=dims, attrs={"units": "degrees_east"}),
    )


def plane(x, y, dims=("member",), units="m"):
    return tuple(xr.DataArray(part, dims=dims, attrs={"units": units}) for part in (x, y))


@pytest.mark.parametrize("radius", [0.5, 1e3, 2e5, 4e6])
@pytest.mark.parametrize("centre", CENTRES)
def test_members_on_a_small_circle_about_a_point(centre, radius):
    members = 7
    bearing = 2 * np.pi * np.arange(members) / members + 0.3
    found = eh.position_spread(*sphere(*around(centre, radius, bearing)))
    assert float(found) == pytest.approx(radius * np.sqrt(members / (members - 1)), rel=1e-7)
    assert found.attrs["units"] == "m"


@pytest.mark.parametrize("centre", CENTRES)
def test_length_and_bearing_of_displacements_are_those_of_the_great_circle(centre):
    # Opposite pairs have the centre as their mean, whatever their distances.
    rng = np.random.default_rng(1)
    distance, bearing = rng.uniform(10, 3e6, 5), rng.uniform(0, 2 * np.pi, 5)
    distance, bearing = np.tile(distance, 2), np.concatenate([bearing, bearing + np.pi])
    latitude, longitude = around(centre, distance, bearing)
    east, north = (part[:, 0] for part in displacements(*_column(latitude, longitude), SPHERE))
    expected = haversine(latitude, longitude, *centre)
    np.testing.assert_allclose(np.hypot(east, north), expected, rtol=1e-9, atol=1e-6)
    np.testing.assert_allclose(expected, distance, rtol=1e-7, atol=1e-6)
    if abs(centre[0]) < 90:  # at a pole every way is south, and east a matter of naming
        # Initial bearing of a great circle (any textbook of navigation).
        phi, other = np.radians(centre[0]), np.radians(latitude)
        turn = np.radians(longitude - centre[1])
        ahead = np.cos(phi) * np.sin(other) - np.sin(phi) * np.cos(other) * np.cos(turn)
        np.testing.assert_allclose(
            np.arctan2(east, north), np.arctan2(np.sin(turn) * np.cos(other), ahead), atol=1e-7
        )


def _column(*parts):
    return [np.asarray(part)[:, np.newaxis] for part in parts]


@pytest.mark.parametrize("centre", [(48.0, -5.0), DATE_LINE, (89.99, 140.0)])
def test_scattered_members_by_haversine_from_the_mean_of_their_unit_vectors(centre):
    rng = np.random.default_rng(2)
    latitude, longitude = around(centre, rng.exponential(3e5, 12), rng.uniform(0, 2 * np.pi, 12))
    phi, along = np.radians(latitude), np.radians(longitude)
    unit = np.stack([np.cos(phi) * np.cos(along), np.cos(phi) * np.sin(along), np.sin(phi)])
    x, y, z = unit.mean(axis=1)
    middle = np.degrees(np.arctan2(z, np.hypot(x, y))), np.degrees(np.arctan2(y, x))
    distance = haversine(latitude, longitude, *middle)
    expected = np.sqrt((distance**2).sum() / 11)
    found = float(eh.position_spread(*sphere(latitude, longitude)))
    assert found == pytest.approx(expected, rel=1e-9)
    turned = float(eh.position_spread(*sphere(latitude, longitude % 360)))
    assert turned == pytest.approx(expected, rel=1e-9)


def test_small_distances_are_those_of_the_tangent_plane():
    rng = np.random.default_rng(3)
    east, north = rng.normal(size=(2, 20)) * 50.0
    latitude = 60.0 + np.degrees(north / RADIUS)
    longitude = 10.0 + np.degrees(east / RADIUS) / np.cos(np.radians(60.0))
    expected = np.sqrt(east.var(ddof=1) + north.var(ddof=1))
    found = float(eh.position_spread(*sphere(latitude, longitude)))
    assert found == pytest.approx(expected, rel=1e-4)
    flat = float(eh.position_spread(*plane(east + 5e5, north + 6e6)))
    assert flat == pytest.approx(expected, rel=1e-9)
    assert float(eh.position_spread(*plane(east, north, units="km"))) == pytest.approx(
        1000 * expected, rel=1e-12
    )


@given(
    st.lists(
        st.tuples(st.floats(-1e5, 1e5, width=32), st.floats(-1e5, 1e5, width=32)),
        min_size=2,
        max_size=9,
    )
)
def test_on_the_plane_variances_add(points):
    x, y = np.array(points).T
    found = float(eh.position_spread(*plane(x, y)))
    expected = np.sqrt(np.var(x, ddof=1) + np.var(y, ddof=1))
    assert found == pytest.approx(expected, rel=1e-9, abs=1e-6)


@given(st.floats(-80, 80), st.floats(-400, 400), st.floats(-180, 180))
def test_the_spread_does_not_depend_on_where_on_the_globe(latitude, longitude, turn):
    rng = np.random.default_rng(4)
    distance, bearing = rng.uniform(1e3, 1e6, 8), rng.uniform(0, 2 * np.pi, 8)
    here = eh.position_spread(*sphere(*around((latitude, longitude), distance, bearing)))
    there = eh.position_spread(*sphere(*around((0.0, 0.0), distance, bearing + turn)))
    assert float(here) == pytest.approx(float(there), rel=1e-8)


def test_a_position_with_either_part_missing_is_missing():
    latitude = np.array([50.0, 51.0, np.nan, 52.0, 53.0, 95.0, 50.0])
    longitude = np.array([1.0, 2.0, 3.0, np.nan, 4.0, 1.0, 9.96921e36])
    found = eh.position_spread(*sphere(latitude, longitude))
    whole = [0, 1, 4]
    expected = eh.position_spread(*sphere(latitude[whole], longitude[whole]))
    assert float(found) == pytest.approx(float(expected), rel=1e-12)
    x, y = np.array([0.0, 3.0, np.nan, 7.0]), np.array([0.0, 4.0, 1.0, np.nan])
    assert float(eh.position_spread(*plane(x, y))) == pytest.approx(np.sqrt(12.5), rel=1e-12)
    one = np.array([50.0, np.nan, np.nan])
    assert np.isnan(float(eh.position_spread(*sphere(one, one))))


def test_no_mean_position_no_spread():
    around_the_globe = np.zeros(4), np.array([0.0, 90.0, 180.0, 270.0])
    assert np.isnan(float(eh.position_spread(*sphere(*around_the_globe))))
    antipodes = np.array([90.0, -90.0]), np.zeros(2)
    assert np.isnan(float(eh.position_spread(*sphere(*antipodes))))
    # Two against one: the mean is where the two are, and the third is half the globe away.
    two_to_one = np.array([90.0, 90.0, -90.0]), np.zeros(3)
    expected = np.pi * RADIUS / np.sqrt(2)
    assert float(eh.position_spread(*sphere(*two_to_one))) == pytest.approx(expected, rel=1e-9)


def test_lazy_in_lazy_out_and_labels_kept():
    rng = np.random.default_rng(5)
    values = rng.normal(size=(2, 5, 3, 6)).astype("f4")
    dims = ("lead", "number", "release")
    first, second = sphere(50 + values[0].transpose(1, 2, 0), values[1].transpose(1, 2, 0), dims)
    first, second = (part.assign_coords(release=np.arange(5) * 10) for part in (first, second))
    plain = eh.position_spread(first, second, dim="number")
    lazy = eh.position_spread(first.chunk(number=2), second.chunk(number=2), dim="number")
    assert isinstance(lazy.data, dask.array.Array)
    assert plain.dims == ("lead", "release")
    assert plain.dtype == lazy.dtype == np.float32
    xr.testing.assert_allclose(plain, lazy.compute())
    one = eh.position_spread(
        first.isel(lead=1, release=2), second.isel(lead=1, release=2), dim="number"
    )
    assert float(plain[1, 2]) == pytest.approx(float(one), rel=1e-6)


def test_beyond_the_median_position_counts_by_distance():
    rng = np.random.default_rng(6)
    x, y = rng.normal(size=(2, 9, 4))
    x[2, 1] = y[2, 1] = np.nan
    expected = np.hypot(x - np.nanmedian(x, axis=0), y - np.nanmedian(y, axis=0)) > 1.1
    np.testing.assert_array_equal(beyond_median(x, 1.1, y), expected)
    assert not expected[2, 1]


def test_one_member_gone_astray_does_not_move_the_median_position():
    latitude, longitude = np.full(11, 50.0), np.linspace(1.0, 1.01, 11)
    latitude[3] = 80.0
    east, north = displacements(*_column(latitude, longitude), SPHERE)
    far = beyond_median(east, 5000.0, north).ravel()
    assert far.tolist() == [number == 3 for number in range(11)]


@pytest.mark.parametrize(
    ("first", "second", "kind", "metres"),
    [
        ("degrees_north", "degrees_east", SPHERE, 1.0),
        ("degree_N", "degreesE", SPHERE, 1.0),
        ("degrees", "degree", SPHERE, 1.0),
        ("degrees", "degrees_east", SPHERE, 1.0),
        ("m", "metres", PLANE, 1.0),
        ("nautical_mile", "nautical_mile", PLANE, 1852.0),
    ],
)
def test_units_tell_sphere_from_plane(first, second, kind, metres):
    found = geometry_of(first, second, "position")
    assert (found.kind, found.metres) == (kind, pytest.approx(metres))


@pytest.mark.parametrize(
    ("first", "second"),
    [
        ("degrees_east", "degrees_north"), ("degrees_north", "m"), ("m", "km"), ("K", "K"),
        ("radians", "radians"), ("", ""), ("m", ""), ("1", "1"), ("nonsense", "nonsense"),
    ],
)  # fmt: skip
def test_other_units_and_mixtures_are_refused(first, second):
    x, y = plane(np.zeros(3), np.zeros(3))
    x.attrs["units"], y.attrs["units"] = first, second
    with pytest.raises(eh.ArgumentError) as refusal:
        eh.position_spread(x, y)
    error = refusal.value
    assert "units of first and second" in error.culprit
    assert "degrees_north" in error.expected
    assert (first or "no units") in error.found
    assert "units attributes" in error.remedy


def test_members_that_are_not_there_or_do_not_match_are_refused():
    x, y = plane(np.zeros(3), np.zeros(3), dims=("drifter",))
    with pytest.raises(eh.ArgumentError, match="'member'"):
        eh.position_spread(x, y)
    with pytest.raises(eh.ArgumentError, match="at least two members"):
        eh.position_spread(x[:1], y[:1], dim="drifter")
    with pytest.raises(eh.ArgumentError, match="same positions"):
        eh.position_spread(x, y[:2], dim="drifter")
    lead = {"drifter": [1, 2, 3]}, {"drifter": [1, 2, 4]}
    with pytest.raises(eh.ArgumentError, match="same positions"):
        eh.position_spread(x.assign_coords(lead[0]), y.assign_coords(lead[1]), dim="drifter")


def test_a_field_reduced_in_windows_is_the_field_reduced_at_once():
    rng = np.random.default_rng(7)
    members, leads, size = 6, 3, 40
    latitude = rng.normal(50, 1, (members, leads, size))
    longitude = rng.normal(179, 2, latitude.shape)
    latitude[2, 1, 5] = longitude[4, :, 11] = np.nan
    index = np.arange(3, 37)
    region = RegionWeights("box", index, rng.dirichlet(np.ones(index.size)))
    reduction = Reduction(
        size, (region,), np.array([30, 4]), np.arange(1, size, 4), (9e4,), geometry=SPHERE
    )
    whole = reduce_block(latitude, reduction, None, longitude)
    parts = empty_summary(reduction, members, leads, size)
    for points in (np.arange(0, size, 2), np.arange(1, size, 2)):
        part = reduce_block(latitude[..., points], reduction, points, longitude[..., points])
        parts.add(part, slice(0, leads), points)
    for name, values in vars(whole).items():
        np.testing.assert_allclose(getattr(parts, name), values, rtol=1e-6, err_msg=name)
    # By hand: the spread at every point, the trace of the inner products, the gaps of either part.
    spread = eh.position_spread(*sphere(latitude, longitude, ("member", "lead", "point")))
    np.testing.assert_allclose(np.sqrt(whole.variance), spread, rtol=1e-6)
    count = np.isfinite(latitude + longitude).sum(axis=0)[:, index]
    trace = (region.weight * spread.values[:, index] ** 2 * (count - 1)).sum(axis=1)
    np.testing.assert_allclose(np.einsum("lrmm->l", whole.gram), trace, rtol=1e-6)
    assert whole.gaps.tolist() == [[0, 0, 0, 0, 1, 0], [0, 0, 1, 0, 1, 0], [0, 0, 0, 0, 1, 0]]
    low = np.nanmin(np.where(np.isfinite(longitude), latitude, np.nan), axis=2).T
    np.testing.assert_array_equal(whole.low, low)
