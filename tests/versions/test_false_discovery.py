"""False discoveries on maps: against scipy, and on fields with spatial correlation."""

import numpy as np
import pytest
import xarray as xr
from scipy import ndimage, stats

import ensemble_horizon as eh
from ensemble_horizon import ArgumentError


def test_adjusted_p_values_are_those_of_scipy():
    values = np.random.default_rng(0).random((7, 9)) ** 3
    found = eh.false_discovery(xr.DataArray(values, dims=("latitude", "longitude")), 0.1)
    reference = stats.false_discovery_control(values.ravel()).reshape(values.shape)
    np.testing.assert_allclose(found.adjusted, reference)
    np.testing.assert_array_equal(found.significant, reference <= 0.1)


def test_maps_are_judged_each_for_itself_and_gaps_are_no_tests():
    values = np.random.default_rng(1).random((3, 5, 6)) ** 4
    values[1, 2, 3:] = np.nan
    p_value = xr.DataArray(values, dims=("criterion", "latitude", "longitude"))
    found = eh.false_discovery(p_value, dim=["latitude", "longitude"])
    assert found.adjusted.dims == p_value.dims
    for number in range(3):
        known = np.isfinite(values[number])
        reference = stats.false_discovery_control(values[number][known])
        np.testing.assert_allclose(found.adjusted.values[number][known], reference)
        assert np.isnan(found.adjusted.values[number][~known]).all()
        assert not found.significant.values[number][~known].any()


def smooth_fields(rng, number, shape=(24, 36), width=2.0):
    """Gaussian fields of unit variance, correlated over a few points, round the globe in x."""
    noise = ndimage.gaussian_filter(
        rng.standard_normal((number, *shape)),
        (0, width, width),
        mode=("reflect", "reflect", "wrap"),
    )
    return noise / noise.std()


def compared_maps(rng, gain, starts=60):
    """Two versions whose limits differ by noise correlated in space and AR(1) 0.5 in time."""
    noise = smooth_fields(rng, starts)
    for start in range(1, starts):
        noise[start] = 0.5 * noise[start - 1] + np.sqrt(0.75) * noise[start]
    time = np.datetime64("2024-01-01", "ns") + np.arange(starts) * np.timedelta64(1, "D")
    old = xr.Dataset(
        {
            "horizon": (("start", "latitude", "longitude"), np.full(noise.shape, 100.0)),
            "status": (("start", "latitude", "longitude"), np.zeros(noise.shape, dtype=np.int8)),
        },
        coords={"start": time},
    )
    new = old.assign(horizon=old.horizon + gain + 10.0 * noise)
    return eh.false_discovery(eh.compare_horizons(old, new, last_lead=240.0).p_value, 0.1)


@pytest.mark.slow
def test_false_finds_on_maps_stay_below_their_level():
    rng = np.random.default_rng(5)
    gain = np.zeros((24, 36))
    gain[:8, :18] = 12.0  # a sixth of the map
    shares, found = [], []
    for _ in range(200):
        significant = compared_maps(rng, gain).significant.values
        shares.append((significant & (gain == 0)).sum() / max(significant.sum(), 1))
        found.append(significant[gain > 0].mean())
    print(f"\nfalse share {np.mean(shares):.3f}, found {np.mean(found):.2f}")
    assert np.mean(shares) <= 0.1
    assert np.mean(found) > 0.8


@pytest.mark.slow
def test_maps_without_any_gain_seldom_show_one():
    rng = np.random.default_rng(6)
    maps = [bool(compared_maps(rng, 0.0).significant.any()) for _ in range(200)]
    print(f"\nmaps with a find: {np.mean(maps)}")
    # Benjamini and Hochberg bound it by the level; 0.1 and two standard errors of 200 maps.
    assert np.mean(maps) <= 0.1 + 2 * np.sqrt(0.1 * 0.9 / 200)


def test_a_gain_on_a_part_of_a_map_is_found_there():
    gain = np.zeros((24, 36))
    gain[:8, :18] = 18.0
    significant = compared_maps(np.random.default_rng(7), gain).significant.values
    assert significant[gain > 0].mean() > 0.95
    # Held against 0.05 point by point, 36 points of the rest would be false finds.
    assert (significant & (gain == 0)).sum() < 36


def test_p_values_are_checked():
    with pytest.raises(ArgumentError, match="p_value: expected p-values between 0 and 1; found"):
        eh.false_discovery(xr.DataArray([0.1, 1.5], dims="latitude"))
    with pytest.raises(ArgumentError, match="p_value: expected a dimension named 'longitude'"):
        eh.false_discovery(xr.DataArray([0.1, 0.5], dims="latitude"), dim="longitude")
    with pytest.raises(ArgumentError, match="level: expected a number between 0 and 1"):
        eh.false_discovery(xr.DataArray([0.1, 0.5], dims="latitude"), 5)
    nothing = eh.false_discovery(xr.DataArray([np.nan, np.nan], dims="latitude"))
    assert not nothing.significant.any()
