"""Intervals of scores by resampled blocks of starts: the second opinion."""

import numpy as np
import pytest
import xarray as xr
from scipy import stats

import ensemble_horizon as eh
from ensemble_horizon.serial import Reason, block_lengths, serial_mean, stationary_index
from ensemble_horizon.skill.blocks import block_interval
from ensemble_horizon.skill.interval import STATISTICS


def autoregressive(rng, shape, correlation):
    """AR(1) along the first axis, unit variance."""
    series = rng.standard_normal(shape)
    for start in range(1, shape[0]):
        series[start] *= np.sqrt(1 - correlation**2)
        series[start] += correlation * series[start - 1]
    return series


def test_of_many_independent_starts_it_is_the_interval_of_student():
    values = np.random.default_rng(0).normal(3.0, 1.0, (400, 5))
    found = block_interval(STATISTICS["mean"], values[np.newaxis], 0.9, 2000)
    low, high = stats.t.interval(0.9, 399, loc=values.mean(axis=0), scale=stats.sem(values, axis=0))
    # The long-run variance has 24 cosines: 2/24 of relative variance, in its root 14 percent each.
    np.testing.assert_allclose(found.high - found.low, high - low, rtol=0.3)
    assert np.mean(found.high - found.low) == pytest.approx(np.mean(high - low), rel=0.1)
    np.testing.assert_allclose((found.high + found.low) / 2, values.mean(axis=0))


def test_it_is_the_symmetric_bootstrap_t():
    """By its definition, one resample after the other, with the errors of `serial_mean`."""
    values = autoregressive(np.random.default_rng(1), (30, 1), 0.5)

    def error(series):
        found = serial_mean(series, 0.9)
        return float((found.high - found.mean)[0] / stats.t.ppf(0.95, found.dof[0]))

    length = max(1.0, float(np.ceil(block_lengths(values).stationary[0])))
    index = stationary_index(30, length, 99, 7)
    middle = float(values.mean())
    away = sorted(abs(float(values[i].mean()) - middle) / error(values[i]) for i in index)
    found = block_interval(STATISTICS["mean"], values[np.newaxis], 0.9, 99, seed=7)
    reach = away[89] * error(values)  # the 90th of 99
    assert found.low[0] == pytest.approx(middle - reach)
    assert found.high[0] == pytest.approx(middle + reach)
    assert found.length[0] == length


def test_gaps_are_closed_and_series_alike_are_drawn_alike():
    rng = np.random.default_rng(2)
    inputs = rng.gamma(4.0, 1.0, (2, 30, 3))
    inputs[:, :, 1] = inputs[:, :, 0]
    holes = inputs.copy()
    holes[1, [3, 17], 0] = np.nan
    statistic = STATISTICS["skill"]
    whole, found = (block_interval(statistic, item, 0.9, 200) for item in (inputs, holes))
    np.testing.assert_allclose([whole.low[0], found.low[1]], whole.low[1], rtol=1e-9)
    np.testing.assert_allclose(whole.high[2], found.high[2], rtol=1e-9)
    closed = np.delete(inputs[:, :, :1], [3, 17], axis=1)
    alone = block_interval(statistic, closed, 0.9, 200)
    np.testing.assert_allclose([found.low[0], found.high[0]], [alone.low[0], alone.high[0]])
    assert found.low[0] != whole.low[0]


def test_scores_have_it_for_the_asking():
    rng = np.random.default_rng(3)
    a, b = (xr.DataArray(rng.gamma(3, 1, (30, 4)), dims=("start", "lead")) for _ in range(2))
    plain = eh.score_interval(a, b, statistic="skill")
    found = eh.score_interval(a, b, statistic="skill", method="blocks", resamples=300)
    xr.testing.assert_equal(found.value, plain.value)
    assert ((found.low < found.value) & (found.value < found.high)).all()
    assert (found.low != plain.low).all()
    assert (found.block_length >= 1).all()
    assert "block_length" not in plain
    again = eh.score_interval(a, b, statistic="skill", method="blocks", resamples=300)
    xr.testing.assert_identical(found, again)
    with pytest.raises(eh.ArgumentError, match="one of influence, blocks"):
        eh.score_interval(a, method="block")
    with pytest.raises(eh.ArgumentError, match="resamples"):
        eh.score_interval(a, method="blocks", resamples=0)


def test_what_has_no_interval_has_none_by_blocks():
    few = xr.DataArray(np.random.default_rng(0).gamma(3, 1, 6), dims="start")
    same = xr.DataArray(np.full(30, 0.1), dims="start")
    for scores, reason in (((few, 2 * few), "few_starts"), ((same, 3 * same), "no_scatter")):
        found = eh.score_interval(*scores, statistic="skill", method="blocks", resamples=50)
        assert np.isnan([found.low, found.high, found.block_length]).all()
        assert Reason(int(found.interval_reason)).name == reason


@pytest.mark.slow
@pytest.mark.parametrize("statistic", ["skill", "correlation"])
@pytest.mark.parametrize(("starts", "correlation"), [(30, 0.0), (30, 0.5), (60, 0.5)])
def test_coverage(statistic, starts, correlation):
    """A little short of what is claimed, and far from the 78 of percentiles."""
    rng = np.random.default_rng([starts, int(10 * correlation)])
    size = (starts, 800, 6)
    truth, noise = (autoregressive(rng, size, correlation) for _ in range(2))
    if statistic == "skill":
        inputs, true = np.stack([0.6 * noise**2, truth**2]), 0.4
    else:
        forecast = 0.7 * truth + np.sqrt(1 - 0.7**2) * noise
        inputs, true = np.stack([forecast * truth, forecast**2, truth**2]), 0.7
    found = block_interval(STATISTICS[statistic], inputs.mean(axis=-1), 0.9, 300)
    # Of 800 cases the share scatters by 1.1 percent.
    assert 0.85 < ((found.low <= true) & (true <= found.high)).mean() < 0.93
