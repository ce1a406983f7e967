"""Long-run variance, block lengths and resamples against statsmodels, arch and closed forms."""

import numpy as np
import pytest
import xarray as xr
from dependent_starts import autoregressive

from ensemble_horizon.errors import ArgumentError
from ensemble_horizon.serial import (
    block_lengths,
    effective_size,
    long_run_variance,
    moving_block_index,
    stationary_index,
)
from ensemble_horizon.serial.starts import in_order


@pytest.mark.parametrize("lags", [0, 1, 3, 12])
def test_long_run_variance_is_that_of_statsmodels(lags):
    regression = pytest.importorskip("statsmodels.api")
    values = autoregressive(np.random.default_rng(lags), 50, 4, 0.6)
    found = long_run_variance(values, lags) / 50
    for column, variance in zip(values.T, found, strict=True):
        model = regression.OLS(column, np.ones(50))
        fit = model.fit(cov_type="HAC", cov_kwds={"maxlags": lags})
        assert variance == pytest.approx(fit.cov_params()[0, 0], rel=1e-12)


def test_gaps_are_closed_up():
    values = autoregressive(np.random.default_rng(0), 40, 2, 0.5)
    gaps = values.copy()
    gaps[[3, 17, 18], 1] = np.nan
    found = long_run_variance(gaps, 3)
    dense = np.delete(values[:, 1], [3, 17, 18])[:, np.newaxis]
    assert found[0] == long_run_variance(values, 3)[0]
    assert found[1] == pytest.approx(long_run_variance(dense, 3)[0])
    assert np.isnan(long_run_variance(np.full((5, 1), np.nan))).all()


def test_effective_size_under_ar1():
    # n (1 - r) / (1 + r) for long series (Thiébaux and Zwiers 1984, from memory).
    values = autoregressive(np.random.default_rng(1), 4000, 20, 0.5)
    assert effective_size(values, lags=60).mean() == pytest.approx(4000 / 3, rel=0.05)


@pytest.mark.parametrize("starts", [12, 30, 61, 365])
@pytest.mark.parametrize("memory", [0.0, 0.5, 0.9])
def test_block_lengths_are_those_of_arch(starts, memory):
    bootstrap = pytest.importorskip("arch.bootstrap")
    values = autoregressive(np.random.default_rng(starts), starts, 50, memory)
    reference = bootstrap.optimal_block_length(values)
    found = block_lengths(values)
    np.testing.assert_allclose(found.stationary, reference["stationary"], rtol=1e-10)
    np.testing.assert_allclose(found.moving, reference["circular"], rtol=1e-10)


def test_block_lengths_of_too_little_are_not_known():
    values = np.random.default_rng(0).normal(size=(30, 3))
    values[9:, 0] = np.nan
    values[:, 1] = 2.0
    assert np.isnan(block_lengths(values).moving).tolist() == [True, True, False]


def test_moving_blocks_are_whole_and_within_the_series():
    index = moving_block_index(20, 4, 500, seed=1)
    assert index.shape == (500, 20)
    assert index.min() == 0 and index.max() == 19
    assert (np.diff(index.reshape(500, 5, 4), axis=2) == 1).all()
    np.testing.assert_array_equal(index, moving_block_index(20, 4, 500, seed=1))
    assert (index != moving_block_index(20, 4, 500, seed=2)).any()


def test_stationary_blocks_have_their_mean_length_and_run_round_the_end():
    index = stationary_index(50, 5.0, 2000, seed=3)
    follows = (np.diff(index, axis=1) % 50) == 1
    # A block ends with probability 1/5; one in fifty new blocks follows on by chance.
    assert follows.mean() == pytest.approx(1 - 0.2 * 49 / 50, abs=0.01)
    assert ((index[:, :-1] == 49) & (index[:, 1:] == 0)).any()
    counts = np.bincount(index.ravel(), minlength=50)
    assert counts.std() / counts.mean() < 0.06


def test_resampling_by_blocks_finds_the_variance_of_a_mean():
    # Künsch 1989, Politis and Romano 1994, in closed form: autocovariances r^k, each short of the
    # variance of the mean, 3 / n, are weighted by 1 - k/L, or round the end by (1 - 1/L)^k.
    starts, length = 400, 20
    lags = np.arange(1, starts)
    weights = {
        moving_block_index: np.clip(1 - lags / length, 0, None),
        stationary_index: (1 - lags / starts) * (1 - 1 / length) ** lags,
    }
    values = autoregressive(np.random.default_rng(8), starts, 200, 0.5)
    for draw, weight in weights.items():
        means = values[draw(starts, length, 200, seed=0)].mean(axis=1)
        truth = 1 - 3 / starts + 2 * (weight * (0.5**lags - 3 / starts)).sum()
        assert means.var(axis=0).mean() * starts == pytest.approx(truth, rel=0.05)


def test_impossible_resamples_are_refused():
    with pytest.raises(ArgumentError, match="length: expected blocks of at most 10 starts") as told:
        moving_block_index(10, 11, 5, seed=0)
    assert told.value.found == "11"
    with pytest.raises(ArgumentError, match="repeats: expected a finite number above zero"):
        stationary_index(10, 2.0, 0, seed=0)


def test_starts_are_sorted_and_doubled_ones_refused():
    times = np.array(["2024-01-03", "2024-01-01", "2024-01-02"], dtype="datetime64[ns]")
    data = xr.DataArray([3.0, 1.0, 2.0], dims="start", coords={"start": times})
    assert in_order(data, "start", "a").values.tolist() == [1.0, 2.0, 3.0]
    doubled = xr.concat([data, data.isel(start=[1])], "start")
    with pytest.raises(ArgumentError, match=r"a\['start'\].*every start once.*2024-01-01T00:00"):
        in_order(doubled, "start", "a")
    with pytest.raises(ArgumentError, match="expected several starts; found 1"):
        in_order(data.isel(start=[0]), "start", "a")
    assert in_order(data.drop_vars("start"), "start", "a").values.tolist() == [3.0, 1.0, 2.0]
