"""Correlated fields: the sample correlation is the one stated, exp(-r^2 / (2 L^2))."""

import numpy as np
import pytest

from ensemble_horizon import toys
from ensemble_horizon.errors import ArgumentError
from ensemble_horizon.toys.correlation import ring_correlation


def fields(system, members, length, **change):
    state = system.default_state()
    chosen = {"amplitude": 1.0, "seed": 5, "method": "correlated", "length": length} | change
    return toys.perturb(system, state, members, **chosen) - state


def gaussian(distance, length):
    return np.exp(-(np.asarray(distance) ** 2) / (2 * length**2))


def test_ring_of_sites():
    # About 400 / (2 sqrt(pi)) / 3 = 38 independent pieces a member, and 600 members.
    moved = fields(toys.system("lorenz-96", sites=400), 600, 3.0)
    lags = np.arange(13)
    found = np.array([np.mean(moved * np.roll(moved, lag, axis=-1)) for lag in lags])
    assert found / found[0] == pytest.approx(gaussian(lags, 3.0), abs=0.03)


def test_ring_correlation_is_positive_and_wound():
    for length in (0.3, 4.0, 15.0, 40.0):
        matrix = ring_correlation(40, length)
        assert np.linalg.eigvalsh(matrix).min() > -1e-13
        assert np.diag(matrix) == pytest.approx(np.ones(40), abs=1e-15)
    apart = np.minimum(np.arange(40), 40 - np.arange(40))
    assert ring_correlation(40, 4.0)[0] == pytest.approx(gaussian(apart, 4.0), abs=4e-6)


def test_two_scales_share_the_length_in_slow_sites():
    system = toys.system("lorenz-96-two-scales", sites=40, fast_sites=5)
    matrix = system.covariance(2.0)
    assert matrix.shape == (240, 240)
    assert matrix[0, :4] == pytest.approx(gaussian(np.arange(4), 2.0), abs=1e-12)
    assert matrix[40, 40:48] == pytest.approx(gaussian(np.arange(8) / 5, 2.0), abs=1e-12)
    assert not matrix[:40, 40:].any()


def test_channel_in_metres():
    system = toys.TwoLayerChannel(
        zonal_waves=12, meridional_modes=12, length=1.2e7, width=8.0e6, latitude=45.0
    )
    moved = fields(system, 3000, 8.0e5)
    # Summed over all wavenumbers the modes give n exp(-r^2 / (2 L^2)) with n = area / (2 pi L^2),
    # less 1 for the mode constant in space, which the channel has not; walls are 4 L away or more.
    pieces = 1.2e7 * 8.0e6 / (2 * np.pi * 8.0e5**2)
    degree = 6.371e6 * np.pi / 180
    along, across = 4.0e5 * np.arange(30), np.array([0.0, 4.0e5, 8.0e5])
    east, north = along / (degree * np.cos(np.radians(45.0))), 45.0 + across / degree
    grid = system.evaluate(moved, north, east)
    upper, lower = (grid[f"streamfunction_{layer}"] for layer in ("upper", "lower"))
    for values in (upper, lower):
        scaled = values / np.sqrt(np.mean(values**2, axis=(0, 2), keepdims=True))
        for lag in (0, 1, 2, 4, 8, 15):
            other = np.roll(scaled, lag, axis=-1)
            found = np.mean(scaled[:, :1] * other, axis=(0, 2))
            distance = np.hypot(min(lag, 30 - lag) * 4.0e5, across)
            expected = (pieces * gaussian(distance, 8.0e5) - 1) / (pieces - 1)
            # 3000 members of about six independent pieces along the channel: 0.0075 each.
            assert found == pytest.approx(expected, abs=0.025)
    assert np.mean(upper * lower) == pytest.approx(0.0, abs=0.02 * np.mean(upper**2))


def test_floats_by_release_distance():
    system = toys.system("double-gyre-floats", rows=10, columns=20)
    moved = fields(system, 600, 8.0e3).reshape(600, 2, 10, 20)
    # Release points are 5 km apart both ways.
    power = np.mean(moved**2)
    for lag in (1, 2, 4):
        expected = gaussian(5.0e3 * lag, 8.0e3)
        east = np.mean(moved[..., lag:] * moved[..., :-lag]) / power
        north = np.mean(moved[..., lag:, :] * moved[..., :-lag, :]) / power
        assert east == pytest.approx(expected, abs=0.03)
        assert north == pytest.approx(expected, abs=0.03)
    assert np.mean(moved[:, 0] * moved[:, 1]) / power == pytest.approx(0.0, abs=0.03)


def test_long_scales_move_floats_as_one():
    moved = fields(toys.system("double-gyre-floats"), 5, 1.0e8).reshape(5, 2, 8)
    assert np.ptp(moved, axis=-1) == pytest.approx(np.zeros((5, 2)), abs=1e-2)


def test_scale_applies_on_top():
    system = toys.system("lorenz-96")
    scale = np.where(np.arange(40) < 20, 1.0, 0.0)
    moved = fields(system, 3, 2.0, scale=scale)
    assert not moved[:, 20:].any()
    assert np.linalg.norm(moved, axis=-1) == pytest.approx(np.ones(3), rel=1e-12)


@pytest.mark.parametrize("name", ["lorenz-63", "spiral-sink"])
def test_systems_without_space_refuse(name):
    with pytest.raises(ArgumentError, match=f"fields of {name}: expected .*places in space"):
        fields(toys.system(name), 2, 1.0)


@pytest.mark.parametrize(
    ("name", "length", "message"),
    [
        ("lorenz-96", None, "length: expected the length scale of the fields; found nothing"),
        ("lorenz-96", -1.0, "length: expected a finite number above zero"),
        ("lorenz-96", 41.0, "at most the 40 sites of the ring; found 41"),
        ("two-layer-channel", float("nan"), "length: expected a finite number above zero"),
        ("two-layer-channel", 1.0e9, "expected displacements above zero in the euclidean norm"),
    ],
)
def test_lengths_out_of_range_are_refused(name, length, message):
    with pytest.raises(ArgumentError, match=message):
        fields(toys.system(name), 2, length)
