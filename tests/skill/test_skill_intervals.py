"""Intervals of scores over dependent starts."""

import numpy as np
import pytest
import xarray as xr

import ensemble_horizon as eh
from ensemble_horizon.serial import Reason
from ensemble_horizon.skill.interval import STATISTICS, influence, square_reach, statistic_interval

LOW, HIGH = 0.87, 0.93


def autoregressive(rng, shape, correlation):
    """AR(1) along the first axis, unit variance."""
    series = rng.standard_normal(shape)
    for start in range(1, shape[0]):
        series[start] *= np.sqrt(1 - correlation**2)
        series[start] += correlation * series[start - 1]
    return series


@pytest.mark.parametrize("name", STATISTICS)
def test_the_contract_of_a_statistic(name):
    statistic = STATISTICS[name]
    rng = np.random.default_rng(0)
    means = rng.uniform(1, 2, (len(statistic.inputs), 5))
    if name == "correlation":
        means[0] *= 0.3
    # The slopes are derivatives of the scale, from central differences.
    step = 1e-6
    for row in range(means.shape[0]):
        moved = np.zeros_like(means)
        moved[row] = step
        wanted = (statistic.scale(means + moved) - statistic.scale(means - moved)) / (2 * step)
        np.testing.assert_allclose(statistic.slopes(means)[row], wanted, rtol=1e-6)
    # The influence is what leaving a start out takes away, to first order.
    inputs = rng.uniform(1, 2, (means.shape[0], 4000, 1))
    full = statistic.scale(inputs.mean(axis=1))
    less = statistic.scale(inputs[:, 1:].mean(axis=1))
    first = influence(statistic, inputs, inputs.mean(axis=1))[0]
    np.testing.assert_allclose((full - less) * 3999, first, rtol=2e-2)


def test_values_are_the_statistics_of_the_means():
    rng = np.random.default_rng(1)
    a, b, c = (xr.DataArray(rng.gamma(3, 1, (30, 4)), dims=("start", "lead")) for _ in range(3))
    ours, theirs, third = (item.values.mean(0) for item in (a, b, c))
    assert eh.score_interval(a).value.values == pytest.approx(ours)
    wanted = {
        "rmse": np.sqrt(ours),
        "ratio": np.sqrt(ours / theirs),
        "skill": 1 - ours / theirs,
        "correlation": 0.1 * ours / np.sqrt(theirs * third),
    }
    given = {"rmse": (a,), "ratio": (a, b), "skill": (a, b), "correlation": (0.1 * a, b, c)}
    for name, scores in given.items():
        found = eh.score_interval(*scores, statistic=name)
        np.testing.assert_allclose(found.value, wanted[name])
        assert ((found.low < found.value) & (found.value < found.high)).all()
        assert (found.starts == 30).all()


def test_gaps_order_and_labels_of_starts():
    rng = np.random.default_rng(2)
    coords = {"start": np.arange(20), "lead": [6.0, 12.0]}
    a, b = (
        xr.DataArray(rng.gamma(3, 1, (20, 2)), dims=("start", "lead"), coords=coords)
        for _ in range(2)
    )
    found = eh.score_interval(a, b, statistic="skill")
    mixed = eh.score_interval(a.isel(start=rng.permutation(20)), b, statistic="skill")
    xr.testing.assert_allclose(found, mixed)
    holes = a.where((a.start != 3) | (a.lead > 6))
    found = eh.score_interval(holes, b, statistic="skill")
    assert found.starts.values.tolist() == [19, 20]
    keep = np.arange(20) != 3
    np.testing.assert_allclose(found.value[0], 1 - a[keep, 0].mean() / b[keep, 0].mean())
    with pytest.raises(eh.ArgumentError, match=r"same starts.*other labels"):
        eh.score_interval(a, b.assign_coords(start=np.arange(1, 21)), statistic="skill")
    with pytest.raises(eh.ArgumentError, match=r"same starts.*sizes"):
        eh.score_interval(a, b.isel(lead=[0]), statistic="skill")


def test_what_has_no_interval_says_why():
    few = xr.DataArray(np.random.default_rng(0).gamma(3, 1, 6), dims="start")
    found = eh.score_interval(few, statistic="rmse")
    assert np.isfinite(found.value)
    assert np.isnan(found.low)
    assert Reason(int(found.interval_reason)) is Reason.few_starts
    same = xr.DataArray(np.full(30, 0.1), dims="start")
    found = eh.score_interval(same, 3 * same, statistic="skill")
    np.testing.assert_allclose(found.value, 2 / 3)
    assert np.isnan(found.low)
    assert Reason(int(found.interval_reason)) is Reason.no_scatter
    perfect = eh.score_interval(0 * same, same, statistic="skill")
    assert float(perfect.value) == 1.0
    assert np.isnan(perfect.high)
    assert Reason(int(perfect.interval_reason)) is Reason.no_scatter
    with pytest.raises(eh.ArgumentError, match="several starts"):
        eh.score_interval(few[:1])
    with pytest.raises(eh.ArgumentError, match="2 for 'skill': score, reference"):
        eh.score_interval(few, statistic="skill")
    with pytest.raises(eh.ArgumentError, match="did you mean 'skill'"):
        eh.score_interval(few, statistic="skil")


def test_the_reach_of_a_mean_square_is_that_of_chi_square():
    # With the variance known, the exact interval from 40 squares: n / chi2 quantiles (scipy).
    from scipy import stats

    exact = np.log(40 / stats.chi2.ppf([0.95, 0.05], 40))
    found = square_reach(np.array([2 / 40 / 1.05]), np.array([1e9]), 0.9)[:, 0]
    np.testing.assert_allclose(found, exact, atol=0.012)


@pytest.mark.slow
@pytest.mark.parametrize(
    ("starts", "correlation", "patterns"),
    [(15, 0.0, 8), (15, 0.5, 8), (30, 0.0, 1), (30, 0.5, 8), (30, 0.7, 8), (60, 0.5, 1),
     (60, 0.7, 8), (120, 0.5, 1)],
)  # fmt: skip
def test_ninety_percent_intervals_cover_as_often_as_they_say(starts, correlation, patterns):
    # Error and anomaly are independent AR(1) Gaussians of some patterns; all truths are known.
    cases = 3000
    rng = np.random.default_rng([starts, int(10 * correlation), patterns])
    error, anomaly = (autoregressive(rng, (starts, patterns, cases), correlation) for _ in range(2))
    forecast = 0.8 * anomaly + 0.6 * error
    other = 1.2 * anomaly + 0.5 * error  # standard deviation 1.3
    given = {
        "rmse": ((error**2,), 1.0),
        "ratio": ((np.ones_like(error), error**2), 1.0),
        "skill": ((np.abs(error), np.abs(other)), 1 - 1 / 1.3),
        "correlation": ((forecast * anomaly, forecast**2, anomaly**2), 0.8),
    }
    for name, (inputs, truth) in given.items():
        series = np.stack([item.mean(axis=1) for item in inputs])
        found = statistic_interval(STATISTICS[name], series)
        share = np.mean((found.low <= truth) & (found.high >= truth))
        assert LOW <= share <= HIGH, (name, share)
