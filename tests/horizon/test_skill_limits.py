"""Leads at which skill ends."""

import numpy as np
import pytest
import xarray as xr

import ensemble_horizon as eh
from ensemble_horizon.horizon.skill_limits import falls_of_curves

LEAD = 12.0 * np.arange(1, 21)


def scores(rng, starts, truth, scatter=0.3, correlation=0.0, memory=0.9, cases=1):
    """Score and reference (S, L, N) whose skill is 1 - truth by lead: AR(1) over starts."""
    apart = np.abs(np.subtract.outer(np.arange(LEAD.size), np.arange(LEAD.size)))
    root = np.linalg.cholesky(memory**apart)
    white = rng.standard_normal((starts, LEAD.size, cases))
    for start in range(1, starts):
        white[start] *= np.sqrt(1 - correlation**2)
        white[start] += correlation * white[start - 1]
    noise = np.einsum("kl,sln->skn", root, white)
    score = truth[:, np.newaxis] * np.exp(scatter * noise - scatter**2 / 2)
    coords = {"lead": ("lead", LEAD, {"units": "hours"})}
    score = xr.DataArray(score, dims=("start", "lead", "place"), coords=coords)
    return score, xr.ones_like(score)


def statuses(found, name="status"):
    return eh.status_names(found[name]).values.tolist()


def test_skill_ends_where_it_ends():
    truth = np.linspace(0.2, 1.3, 20)  # skill zero at the lead where truth is one
    end = float(np.interp(1.0, truth, LEAD))
    score, reference = scores(np.random.default_rng(0), 400, truth, scatter=0.1)
    found = eh.skill_limits(score, reference)
    assert statuses(found) == ["reached"]
    assert found.horizon.attrs["units"] == "hours"
    np.testing.assert_allclose(found.horizon, end, atol=2.0)
    assert found.low < found.horizon < found.high
    np.testing.assert_array_equal(found.low, found.significant_until)
    half = eh.skill_limits(score, reference, above=0.5)
    np.testing.assert_allclose(half.horizon, np.interp(0.5, truth, LEAD), atol=2.0)


def test_statuses_of_skill_that_never_ends_never_was_or_is_not_known():
    rng = np.random.default_rng(1)
    truths = (np.full(20, 0.5), np.full(20, 1.5), np.linspace(0.999, 1.5, 20))
    parts = [scores(rng, 30, truth)[0] for truth in truths]
    nothing = xr.full_like(parts[0], np.nan)
    score = xr.concat([*parts[:2], nothing], "place")
    found = eh.skill_limits(score, xr.ones_like(score))
    assert statuses(found) == ["beyond_run", "at_start", "no_data"]
    assert np.isnan(found.horizon).all()
    assert found.high.values[:2].tolist() == [np.inf, LEAD[0]]
    assert np.isinf(found.low.values[0])
    assert np.isnan(found.low.values[2])
    assert statuses(found, "significant_status") == ["beyond_run", "at_start", "no_data"]


def test_more_starts_make_the_significant_lead_later_and_not_the_horizon():
    truth = np.linspace(0.6, 1.3, 20)
    score, reference = scores(np.random.default_rng(2), 400, truth, 0.5, cases=100)
    few, many = (eh.skill_limits(score[:number], reference[:number]) for number in (25, 400))
    assert float(few.significant_until.mean()) < float(many.significant_until.mean()) - 12
    for found in (few, many):
        assert abs(float(found.horizon.mean()) - np.interp(1.0, truth, LEAD)) < 6


def test_hold_passes_over_a_dip():
    truth = np.linspace(0.2, 1.3, 20)
    truth[5] = 1.2
    score, reference = scores(np.random.default_rng(3), 50, truth, 0.05)
    assert float(eh.skill_limits(score, reference).horizon[0]) < LEAD[5]
    assert float(eh.skill_limits(score, reference, hold=24.0).horizon[0]) > LEAD[12]


def test_correlation_ends_at_six_tenths():
    rng = np.random.default_rng(4)
    wanted = np.linspace(0.95, 0.3, 20)
    anomaly = rng.standard_normal((200, 20, 30))
    noise = rng.standard_normal(anomaly.shape)
    forecast = wanted[:, np.newaxis] * anomaly + np.sqrt(1 - wanted**2)[:, np.newaxis] * noise
    coords = {
        "lead": LEAD,
        "latitude": ("cell", np.zeros(30)),
        "longitude": ("cell", np.arange(30)),
    }
    forecast, analysis = (
        xr.DataArray(item, dims=("start", "lead", "cell"), coords=coords)
        for item in (forecast, anomaly)
    )
    parts = eh.anomaly_products(forecast, analysis, xr.zeros_like(analysis[0, 0]))
    found = eh.skill_limits(*parts.data_vars.values(), statistic="correlation")
    assert found.attrs["above"] == 0.6
    np.testing.assert_allclose(found.horizon, np.interp(-0.6, -wanted, LEAD), atol=3.0)


def test_few_starts_have_a_limit_without_an_interval():
    score, reference = scores(np.random.default_rng(5), 6, np.linspace(0.2, 1.3, 20), 0.05)
    found = eh.skill_limits(score, reference)
    assert statuses(found) == ["reached"]
    assert np.isnan(found.low)
    assert np.isnan(found.high)
    assert statuses(found, "significant_status") == ["no_data"]
    with pytest.raises(eh.ArgumentError, match="several starts"):
        eh.skill_limits(score[:1], reference[:1])


def test_bad_arguments_are_refused():
    score, reference = scores(np.random.default_rng(5), 20, np.linspace(0.2, 1.3, 20))
    with pytest.raises(eh.ArgumentError, match="one of skill, correlation"):
        eh.skill_limits(score, statistic="rmse")
    with pytest.raises(eh.ArgumentError, match="below 1"):
        eh.skill_limits(score, reference, above=1.0)
    with pytest.raises(eh.ArgumentError, match="lead dimension with its coordinate"):
        eh.skill_limits(score.drop_vars("lead"), reference.drop_vars("lead"))
    with pytest.raises(eh.ArgumentError, match="strictly increasing"):
        eh.skill_limits(score[:, ::-1], reference[:, ::-1])
    with pytest.raises(eh.ArgumentError, match="dimension named 'start'"):
        eh.skill_limits(score.rename(start="run"), reference)


@pytest.mark.slow
@pytest.mark.parametrize(
    ("starts", "correlation", "memory"), [(30, 0.0, 0.9), (30, 0.5, 0.98), (60, 0.5, 0.9)]
)
def test_intervals_cover_and_claims_of_significance_are_kept(starts, correlation, memory):
    truth = np.linspace(0.7, 1.3, 20)
    end = float(np.interp(1.0, truth, LEAD))
    rng = np.random.default_rng([starts, int(100 * memory)])
    score, reference = scores(rng, starts, truth, 0.3, correlation, memory, cases=2000)
    found = eh.skill_limits(score, reference)
    share = float(((found.low <= end) & (found.high >= end)).mean())
    assert 0.87 <= share <= 0.93
    # A lead without skill is claimed in no more than five of a hundred, with the noise of 2000.
    beyond = float((found.low > end).mean())
    assert beyond < 0.05 + 0.02


def test_what_was_not_judged_at_the_last_lead_is_not_beyond_the_run():
    # Long leads with too few starts have a score but no interval, or neither.
    value = np.array([[0.9, 0.9], [0.8, 0.8], [0.7, np.nan]])
    low, high = value - 0.2, value + 0.05
    low[2], high[2] = np.nan, np.nan
    found = falls_of_curves(np.arange(3.0), value, low, high, level=0.0)
    assert found.status.tolist() == [eh.Status.beyond_run, eh.Status.no_data]
    assert found.significant_status.tolist() == [eh.Status.no_data, eh.Status.no_data]
    assert np.isnan(found.low).all()
    assert np.isnan(found.high).all()
    assert np.isnan(found.significant_until).all()


def falling(*unknown):
    """Falls to zero at lead 5 of 0, 1, ..., 9; the ends of its interval at 3.5 and 6.5."""
    value = np.linspace(5.0, -4.0, 10)[:, np.newaxis]
    low, high = value - 1.5, value + 1.5
    for curve in (value, low, high):
        curve[list(unknown)] = np.nan
    return falls_of_curves(np.arange(10.0), value, low, high, level=0.25)


def test_a_limit_within_a_gap_has_an_interval_that_reaches_over_it():
    whole = falling()
    assert (whole.low, whole.horizon, whole.high) == pytest.approx((3.25, 4.75, 6.25))
    assert np.isnan(whole.gap)
    found = falling(2, 3, 4, 5, 6)
    assert found.status == eh.Status.reached
    # Known at 1 and at 7, and nothing between.
    assert (found.low, found.high, found.gap) == (1.0, 7.0, 6.0)
    assert 1.0 < found.horizon < 7.0
    # What was not judged is not claimed.
    assert found.significant_until == 1.0
    assert found.significant_status == eh.Status.reached


def test_the_interval_is_the_longer_one_of_noise_and_gap():
    found = falling(5)
    assert (found.low, found.high, found.gap) == pytest.approx((3.25, 6.25, 2.0))
    assert found.significant_until == pytest.approx(3.25)
    # The lower end falls within the gap, the score itself after it.
    found = falling(3, 4)
    assert (found.low, found.horizon, found.high) == pytest.approx((2.0, 4.75, 6.25))
    assert (found.significant_until, found.gap) == (2.0, 3.0)


def test_gaps_elsewhere_change_nothing():
    for unknown in ((1,), (0, 1), (8,)):
        found, whole = falling(*unknown), falling()
        for name in ("horizon", "low", "high", "significant_until", "status", "gap"):
            np.testing.assert_array_equal(getattr(found, name), getattr(whole, name))


def test_beyond_the_last_score_nothing_is_stated():
    found = falling(5, 6, 7, 8, 9)
    assert found.status == eh.Status.no_data
    assert np.isnan([found.horizon, found.high, found.gap]).all()
    assert found.significant_status == eh.Status.reached  # its lower end fell before


def test_a_gap_is_told_by_the_labelled_front():
    score, reference = scores(np.random.default_rng(6), 30, np.linspace(0.2, 1.3, 20), 0.05)
    whole = eh.skill_limits(score, reference)
    at = float(whole.horizon[0])
    score = score.where(np.abs(score.lead - at) > 30)
    found = eh.skill_limits(score, reference)
    before = LEAD[at - 30 > LEAD].max()
    after = LEAD[at + 30 < LEAD].min()
    assert (float(found.low[0]), float(found.high[0])) == (before, after)
    assert float(found.gap[0]) == after - before
    assert found.gap.attrs["units"] == "hours"
    assert np.isnan(whole.gap[0])
