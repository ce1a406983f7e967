"""Spread over members against numpy and scipy."""

import dask.array as da
import numpy as np
import pytest
import xarray as xr
from hypothesis import given, settings
from hypothesis import strategies as st
from hypothesis.extra import numpy as hnp

import ensemble_horizon as eh
from ensemble_horizon.spread.moments import beyond_median, member_variance


def ensemble(values, **coords):
    return xr.DataArray(values, dims=("lead", "member"), coords=coords, attrs={"units": "K"})


def test_spread_is_the_standard_deviation_with_divisor_one_less():
    values = np.random.default_rng(0).normal(280, 3, size=(7, 20))
    found = eh.spread(ensemble(values))
    np.testing.assert_allclose(found, np.std(values, axis=1, ddof=1), rtol=1e-13)
    assert found.attrs["units"] == "K"
    assert found.dims == ("lead",)


def test_single_precision_keeps_a_small_spread_about_a_large_mean():
    rng = np.random.default_rng(1)
    values = (50000 + rng.integers(-3, 4, size=(20, 1000))).astype(np.float32)
    variance, _ = member_variance(values)
    np.testing.assert_allclose(variance, values.astype(float).var(axis=0, ddof=1), rtol=2e-6)


@given(
    hnp.arrays(np.float64, (6, 5), elements=st.floats(-1e3, 1e3)),
    st.permutations(range(6)),
)
@settings(max_examples=60, deadline=None)
def test_order_of_members_changes_nothing(values, order):
    first, _ = member_variance(values)
    second, _ = member_variance(values[list(order)])
    np.testing.assert_allclose(first, second, rtol=1e-9, atol=1e-9)


@given(
    hnp.arrays(np.float64, (6, 5), elements=st.floats(-1e3, 1e3)),
    st.floats(1e-3, 1e3),
    st.floats(-1e3, 1e3),
)
@settings(max_examples=60, deadline=None)
def test_scaling_scales_and_shifting_leaves(values, factor, shift):
    base = np.sqrt(member_variance(values)[0])
    scaled = np.sqrt(member_variance(values * factor + shift)[0])
    np.testing.assert_allclose(scaled, factor * base, rtol=1e-6, atol=1e-6)


def test_missing_members_are_left_out_point_by_point():
    values = np.random.default_rng(2).normal(size=(8, 50))
    values[2, 10:20] = np.nan
    values[0, :5] = np.nan
    values[1:, 40] = np.nan
    variance, count = member_variance(values)
    with np.errstate(invalid="ignore"):
        expected = np.array(
            [np.nan if np.isfinite(c).sum() < 2 else np.nanvar(c, ddof=1) for c in values.T]
        )
    np.testing.assert_allclose(variance, expected, rtol=1e-12)
    np.testing.assert_array_equal(count, np.isfinite(values).sum(axis=0))


def test_mean_squared_pair_distance_is_twice_the_variance():
    # Identity of the sample variance (common practice).
    values = np.random.default_rng(3).normal(size=(12, 1))
    pairs = [(a - b) ** 2 for i, a in enumerate(values) for b in values[i + 1 :]]
    np.testing.assert_allclose(np.mean(pairs), 2 * member_variance(values)[0][0], rtol=1e-12)


def test_lazy_stays_lazy():
    calls = []

    def load(block):
        calls.append(1)
        return block

    values = da.map_blocks(load, da.ones((4, 6), chunks=(2, 3)), dtype=float, meta=np.empty((0, 0)))
    found = eh.spread(ensemble(values))
    assert found.chunks is not None
    assert calls == []
    np.testing.assert_array_equal(found.compute(), 0.0)
    assert len(calls) == 4


def test_one_member_is_refused_with_the_way_out():
    with pytest.raises(eh.ArgumentError, match="at least two members; found 1"):
        eh.spread(ensemble(np.ones((3, 1))))


def test_without_a_member_dimension_the_message_names_what_was_found():
    with pytest.raises(eh.ArgumentError, match="dimension named 'member'"):
        eh.spread(xr.DataArray(np.ones(3), dims="run"))


@pytest.mark.parametrize("members", [5, 6])
def test_beyond_median_with_gaps_equals_nanmedian(members):
    values = np.random.default_rng(4).normal(size=(members, 200))
    values[1, ::7] = np.nan
    values[3, ::5] = np.nan
    expected = np.abs(values - np.nanmedian(values, axis=0)) > 1.0
    np.testing.assert_array_equal(beyond_median(values, 1.0), expected)


def test_exceedance_is_the_share_of_members():
    values = np.array([[0.0, 0.1, 0.2, 5.0, -4.0], [0.0, 0.1, 0.2, 0.3, np.nan]])
    np.testing.assert_allclose(eh.exceedance(ensemble(values), 1.0), [0.4, 0.0])
