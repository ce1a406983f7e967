"""Means over dependent starts: size, coverage and power, for few starts and awkward values."""

import numpy as np
import pytest
from dependent_starts import autoregressive, hours_gained
from scipy import stats

from ensemble_horizon.errors import ArgumentError
from ensemble_horizon.serial import LEAST_STARTS, Reason, long_run_variance, mean_noise, serial_mean

REPETITIONS = 6000


def variance_of_mean(starts, memory):
    """Of AR(1) with unit variance: (1 + 2 sum (1 - k/n) r^k) / n."""
    lags = np.arange(1, starts)
    return (1 + 2 * ((1 - lags / starts) * memory**lags).sum()) / starts


def false_share(values):
    return float(np.mean(serial_mean(values).p_value < 0.05))


def covered(values, truth=0.0):
    found = serial_mean(values, 0.9)
    given = found.reason == Reason.given
    return float(np.mean(((found.low <= truth) & (found.high >= truth))[given]))


@pytest.mark.parametrize("starts", [30, 60, 120])
@pytest.mark.parametrize("memory", [0.0, 0.3, 0.5])
def test_no_difference_is_found_five_times_in_a_hundred(starts, memory):
    values = autoregressive(np.random.default_rng(starts), starts, REPETITIONS, memory)
    assert 0.035 <= false_share(values) <= 0.065
    assert 0.87 <= covered(values) <= 0.93


@pytest.mark.parametrize("starts", [20, 30, 60])
@pytest.mark.parametrize("memory", [0.0, 0.5])
def test_hours_gained_with_many_zeros_are_not_taken_for_gains(starts, memory):
    values = hours_gained(np.random.default_rng(starts), starts, REPETITIONS, memory)
    assert np.mean(values == 0) > 0.5
    assert false_share(values) <= 0.065
    assert 0.87 <= covered(values) <= 0.945


def test_newey_west_with_normal_quantiles_would_find_what_is_not_there():
    # Why the common recipe is not used.
    values = autoregressive(np.random.default_rng(5), 30, REPETITIONS, 0.5)
    score = values.mean(axis=0) / np.sqrt(long_run_variance(values) / 30)
    assert np.mean(np.abs(score) > stats.norm.ppf(0.975)) > 0.15


@pytest.mark.parametrize("starts", [30, 60])
def test_gaps_leave_the_size_right(starts):
    rng = np.random.default_rng([starts, 9])
    values = autoregressive(rng, starts, REPETITIONS, 0.5)
    values[rng.permutation(starts)[: starts // 4]] = np.nan  # a night without runs
    values[rng.random(values.shape) < 0.1] = np.nan  # a point without data
    assert 0.035 <= false_share(values) <= 0.065
    assert 0.87 <= covered(values) <= 0.93


@pytest.mark.parametrize("memory", [0.0, 0.5])
def test_a_true_gain_is_found_with_its_sign_and_size(memory):
    # A gain of 2.8 standard errors: found by 80 tests in a hundred, were those errors known.
    values = 12.0 * autoregressive(np.random.default_rng(11), 60, 4000, memory)
    gain = 2.8 * np.sqrt(variance_of_mean(60, memory)) * 12.0
    found = serial_mean(values + gain)
    assert found.mean.mean() == pytest.approx(gain, rel=0.02)
    assert 0.87 <= covered(values + gain, gain) <= 0.93
    significant = found.p_value < 0.05
    assert np.mean(significant & (found.mean > 0)) > 0.6
    assert np.mean(significant & (found.mean < 0)) < 0.001


@pytest.mark.parametrize("starts", [12, 30, 60])
def test_independent_starts_cost_less_than_with_plain_cosines(starts):
    # scipy.stats.ttest_1samp knows that starts are independent. Plain cosines, 0.4 n^(2/3) of them
    # (Lazarus and others 2018), would widen its interval by the ratio of the quantiles of t.
    values = autoregressive(np.random.default_rng(3), starts, 4000, 0.0)
    found = serial_mean(values)
    reference = stats.ttest_1samp(values, 0.0).confidence_interval(0.9)
    ratio = np.median((found.high - found.low) / (reference.high - reference.low))
    plain = stats.t.ppf(0.95, round(0.4 * starts ** (2 / 3))) / stats.t.ppf(0.95, starts - 1)
    assert 1.0 <= ratio <= plain


def test_variance_of_the_mean_is_that_of_ar1_in_the_long_run():
    noise = mean_noise(autoregressive(np.random.default_rng(1), 2000, 500, 0.5))
    assert noise.variance.mean() == pytest.approx(variance_of_mean(2000, 0.5), rel=0.05)


def test_series_are_judged_each_for_itself():
    rng = np.random.default_rng(2)
    values = rng.normal(size=(40, 5000))
    values[rng.random(values.shape) < 0.2] = np.nan
    values[:, 7] = np.nan
    whole = serial_mean(values)
    for column in (0, 7, 4999):
        alone = serial_mean(values[:, [column]])
        for field in ("mean", "low", "high", "p_value", "starts", "reason"):
            np.testing.assert_allclose(getattr(whole, field)[column], getattr(alone, field)[0])


def test_a_shift_and_a_scale_go_through():
    values = np.random.default_rng(4).normal(size=(30, 3))
    plain, moved = serial_mean(values), serial_mean(100 - 5 * values)
    np.testing.assert_allclose(moved.low, 100 - 5 * plain.high)
    np.testing.assert_allclose(moved.high, 100 - 5 * plain.low)


def test_few_starts_and_values_without_scatter_get_a_reason_and_no_interval():
    values = np.random.default_rng(0).normal(size=(30, 5))
    values[LEAST_STARTS - 1 :, 0] = np.nan
    values[:, 1] = 6.0
    values[:, 2] = 0.0
    values[:, 3] = np.nan
    found = serial_mean(values)
    reasons = [Reason(int(code)).name for code in found.reason]
    assert reasons == ["few_starts", "no_scatter", "no_scatter", "few_starts", "given"]
    assert np.isnan(found.low[:4]).all() and np.isnan(found.p_value[:4]).all()
    assert found.mean[1] == 6.0 and found.mean[2] == 0.0 and np.isnan(found.mean[3])
    assert found.starts.tolist() == [LEAST_STARTS - 1, 30, 30, 0, 30]


def test_confidence_is_a_fraction():
    with pytest.raises(ArgumentError, match=r"confidence.*between 0 and 1.*90"):
        serial_mean(np.zeros((20, 1)), 90)
