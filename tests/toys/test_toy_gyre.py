"""Floats in the double gyre: the published flow, its walls, its period, its floats."""

import numpy as np
import pytest
from scipy.integrate import solve_ivp

from ensemble_horizon import toys
from ensemble_horizon.errors import ArgumentError

FLOATS = toys.system("double-gyre-floats")
H, DAY = 5.0e4, 86400.0
TIMES = np.array([0.0, 1.3, 2.5, 4.9, 7.5, 33.1])


def published_velocity(x, y, t):
    """Shadden, Lekien and Marsden 2005 (from memory), without units: A 0.1, eps 0.25, 2 pi/10."""
    a = 0.25 * np.sin(0.2 * np.pi * t)
    b = 1 - 2 * a
    f, slope = a * x**2 + b * x, 2 * a * x + b
    u = -np.pi * 0.1 * np.sin(np.pi * f) * np.cos(np.pi * y)
    v = np.pi * 0.1 * np.cos(np.pi * f) * np.sin(np.pi * y) * slope
    return u, v


def places(count=200, seed=3):
    x, y = np.random.default_rng(seed).random((2, count))
    return 2 * H * x, H * y


@pytest.mark.parametrize("time", TIMES)
def test_defaults_are_the_published_case(time):
    x, y = places()
    found = FLOATS.velocity(x, y, time)
    expected = published_velocity(x / H, y / H, time)
    for component, unit in zip(found, expected, strict=True):
        assert component == pytest.approx(unit * H / DAY, abs=1e-13)


@pytest.mark.parametrize("time", TIMES)
def test_velocity_is_the_curl_of_the_streamfunction(time):
    x, y = places()
    u, v = FLOATS.velocity(x, y, time)
    small = 5.0
    along = FLOATS.streamfunction(x + small, y, time) - FLOATS.streamfunction(x - small, y, time)
    across = FLOATS.streamfunction(x, y + small, time) - FLOATS.streamfunction(x, y - small, time)
    # Central differences err by (pi d / H)^2 / 6 and its like: 1e-7 of the speed.
    assert v == pytest.approx(along / (2 * small), abs=1e-6)
    assert u == pytest.approx(-across / (2 * small), abs=1e-6)


@pytest.mark.parametrize("swing", [0.0, 0.25, 0.45])
def test_no_flow_through_the_walls_at_any_time(swing):
    floats = toys.GyreFloats(swing=swing)
    along, time = np.linspace(0, 1, 51), TIMES[:, None]
    for x in (0.0, 2 * H):
        u, _ = floats.velocity(x, H * along, time)
        assert np.abs(u).max() < 1e-15
        assert np.abs(floats.streamfunction(x, H * along, time)).max() < 1e-10
    for y in (0.0, H):
        _, v = floats.velocity(2 * H * along, y, time)
        assert np.abs(v).max() < 1e-15


def test_floats_stay_in_the_basin():
    floats = toys.GyreFloats(rows=12, columns=24)
    for states in toys.march(floats, floats.default_state(), 24 * 40, every=24):
        x, y = np.split(states, 2)
        assert 0 < x.min() < x.max() < 2 * H
        assert 0 < y.min() < y.max() < H


def test_flow_repeats_after_the_period_and_is_mirrored_after_half():
    floats = toys.GyreFloats(period=7.0)
    x, y = places()
    for time in TIMES:
        u, v = floats.velocity(x, y, time)
        again = floats.velocity(x, y, time + 7.0)
        assert np.array(again) == pytest.approx(np.array([u, v]), abs=1e-13)
        half_u, half_v = floats.velocity(2 * H - x, y, time + 3.5)
        assert half_u == pytest.approx(-u, abs=1e-13)
        assert half_v == pytest.approx(v, abs=1e-13)
        if time:
            assert not np.allclose(floats.velocity(x, y, time + 3.5), [u, v], atol=1e-3)


def test_without_swing_a_float_stays_on_its_streamline():
    floats = toys.GyreFloats(swing=0.0, rows=3, columns=5)
    run = toys.integrate(floats, floats.default_state(), 24 * 30, every=24)
    x, y = np.split(run.states, 2, axis=-1)
    psi = floats.streamfunction(x, y)
    scale = FLOATS.speed * H / np.pi
    assert psi == pytest.approx(np.broadcast_to(psi[0], psi.shape), abs=1e-6 * scale)


@pytest.mark.parametrize("time", TIMES)
def test_paths_agree_with_scipy(time):
    """Five days of all floats, started at several times, by another scheme and in other units."""

    def law(t, state):
        return np.concatenate(published_velocity(*np.split(state, 2), t))

    start = FLOATS.default_state()
    expected = solve_ivp(law, (time, time + 5.0), start / H, "DOP853", rtol=1e-11, atol=1e-12).y[
        :, -1
    ]
    run = toys.integrate(FLOATS, start, 120, every=120, time=time)
    # Metres, in a basin of 50 km.
    assert run.states[-1] == pytest.approx(H * expected, abs=2.0)
    assert np.linalg.norm(run.states[-1] - start) > H


def test_every_start_has_its_own_time():
    start = np.tile(FLOATS.default_state(), (3, 2, 1))
    when = np.array([0.0, 2.5, 7.5])[:, None]
    together = toys.integrate(FLOATS, start, 48, time=when).states[-1]
    for number, time in enumerate(when[:, 0]):
        alone = toys.integrate(FLOATS, start[number, 0], 48, time=time).states[-1]
        assert np.array_equal(together[number, 1], alone)
    assert np.linalg.norm(together[0, 0] - together[1, 0]) > 1e3


def test_positions_are_fields_over_the_release_points():
    floats = toys.GyreFloats(rows=3, columns=5, latitude=60.0, longitude=-20.0)
    run = toys.run_ensemble(floats, floats.default_state()[None], steps=24, every=12)
    x, y = run.x_position, run.y_position
    assert x.dims == ("start", "lead", "member", "latitude", "longitude")
    assert x.attrs["units"] == y.attrs["units"] == "m"
    assert run.lead.values.tolist() == [0, 12, 24]
    first_x, first_y = x.isel(start=0, lead=0, member=0), y.isel(start=0, lead=0, member=0)
    assert first_x.values[1].tolist() == pytest.approx([1e4, 3e4, 5e4, 7e4, 9e4])
    assert first_y.values[:, 4] == pytest.approx(H * np.array([1, 3, 5]) / 6)
    # A degree of latitude has 111.195 km on a sphere of 6371 km; on 60 north one of longitude half.
    assert run.latitude.values == pytest.approx(
        60.0 + H * np.array([1, 3, 5]) / 6 / 111195, abs=1e-5
    )
    assert run.longitude.values == pytest.approx(-20.0 + first_x.values[0] / 55597.5, abs=1e-4)
    end = toys.integrate(floats, floats.default_state(), 24, every=24).states[-1]
    where = dict(zip(floats.variables, end, strict=True))
    last = run.isel(start=0, lead=-1, member=0)
    assert float(last.x_position[2, 3]) == where["x_2_3"]
    assert float(last.y_position[0, 1]) == where["y_0_1"]


def test_norms_are_metres_in_all_and_of_a_float():
    moved = np.concatenate([np.full(8, 300.0), np.full(8, 400.0)])
    norms = FLOATS.norms()
    assert float(norms["area-weighted"].length(moved)) == pytest.approx(500.0)
    assert float(norms["euclidean"].length(moved)) == pytest.approx(500.0 * np.sqrt(8))
    assert {norm.units for norm in norms.values()} == {"m"}


def test_places_go_over_to_another_flow_in_the_same_basin():
    states = FLOATS.default_state()
    slower = toys.GyreFloats(speed=0.1, swing=0.1)
    assert np.array_equal(FLOATS.carried_over(states, slower), states)
    with pytest.raises(ArgumentError, match="basin of the same height, 50000 m; found 60000 m"):
        FLOATS.carried_over(states, toys.GyreFloats(height=6e4))
    with pytest.raises(ArgumentError, match="other: expected a system that takes over"):
        FLOATS.carried_over(states, toys.GyreFloats(rows=4, columns=2))


def test_a_pole_is_no_place_for_a_tangent_plane():
    with pytest.raises(ArgumentError, match=r"above -89 and below 89 .latitude of the south-west"):
        toys.GyreFloats(latitude=90.0)
