"""Time to the limit over many starts: against scipy, by hand, and coverage on known truth."""

import numpy as np
import pytest
import xarray as xr
from scipy import integrate, special, stats
from scipy.signal import lfilter

import ensemble_horizon as eh
from ensemble_horizon import ArgumentError, Status
from ensemble_horizon.horizon.survival import influences, log_rank, share_at, survival
from ensemble_horizon.serial import Reason

LAST = 150.0


def horizons_of(limit, last=LAST, **dims):
    """Dataset of horizons (start, ...) from true limits: beyond the last lead not a number."""
    limit = np.asarray(limit, dtype=float)
    last = np.asarray(last, dtype=float)
    status = np.where(limit > last, Status.beyond_run, Status.reached).astype(np.int8)
    names = ("start", *dims)
    time = np.datetime64("2024-01-01", "ns") + np.arange(limit.shape[0]) * np.timedelta64(1, "D")
    return xr.Dataset(
        {
            "horizon": (names, np.where(limit > last, np.nan, limit), {"units": "hours"}),
            "status": (names, status),
        },
        coords={"start": time, **dims},
    )


def censored_sample(rng, starts, series):
    """Rounded times, so that many are alike, cut off at three different ends."""
    limit = np.round(rng.exponential(50.0, (starts, series)) / 6) * 6
    end = rng.choice([42.0, 84.0, 120.0], (starts, series))
    return np.minimum(limit, end), limit <= end


def scipy_sample(time, event):
    return stats.CensoredData.right_censored(time, ~event)


def test_shares_are_those_of_kaplan_and_meier_in_scipy():
    time, event = censored_sample(np.random.default_rng(0), 40, 20)
    time[5, 3] = np.nan
    leads = np.array([0.0, 6.0, 20.0, 42.0, 63.0, 84.0, 100.0])
    shares, _ = share_at(survival(time, event), leads)
    for column, share in enumerate(shares.T):
        known = np.isfinite(time[:, column])
        sample = scipy_sample(time[known, column], event[known, column])
        reference = stats.ecdf(sample).sf
        last = time[known, column].max()
        seen = (leads <= last) | (reference.evaluate(leads) == 0)
        np.testing.assert_allclose(share[seen], reference.evaluate(leads)[seen], atol=1e-12)
        assert np.isnan(share[~seen]).all()


@pytest.mark.filterwarnings("ignore:The confidence interval is undefined")
def test_scatter_of_shares_is_that_of_greenwood_in_scipy():
    # scipy's interval of the survival function is share -+ z sqrt(variance of Greenwood).
    time, event = censored_sample(np.random.default_rng(1), 60, 5)
    found = survival(time, event)
    share, number = share_at(found, np.array([30.0]))
    for column in range(5):
        curve = stats.ecdf(scipy_sample(time[:, column], event[:, column])).sf
        high = curve.confidence_interval(0.95).high.evaluate(30.0)
        error = (high - curve.evaluate(30.0)) / stats.norm.ppf(0.975)
        worth = share[0, column] * (1 - share[0, column]) / error**2
        assert number[0, column] == pytest.approx(worth, rel=1e-9)
        part = influences(found, 30.0)[:, column]
        assert part.mean() == pytest.approx(0.0, abs=1e-12)
        assert (part**2).sum() / 60**2 == pytest.approx(error**2, rel=1e-9)


def test_log_rank_is_that_of_scipy():
    rng = np.random.default_rng(2)
    first, second = censored_sample(rng, 40, 20), censored_sample(rng, 33, 20)
    second[0][4, 7] = np.nan
    found = log_rank((first[0], second[0]), (first[1], second[1]))
    for column, p_value in enumerate(found):
        known = np.isfinite(second[0][:, column])
        reference = stats.logrank(
            scipy_sample(first[0][:, column], first[1][:, column]),
            scipy_sample(second[0][known, column], second[1][known, column]),
        )
        assert p_value == pytest.approx(reference.pvalue, rel=1e-9)


def test_statuses_count_as_what_they_say():
    data = horizons_of([30.0, 200.0, 30.0, 30.0, 30.0, 60.0])
    data["status"][2], data["status"][3], data["status"][4] = (
        Status.at_start, Status.no_growth, Status.no_data,
    )  # fmt: skip
    data["horizon"][2:5] = np.nan
    found = eh.time_to_limit(data, last_lead=LAST, first_lead=6.0, leads=[3, 6, 30, 60, 150])
    counts = [int(found[name]) for name in ("starts", "reached", "censored", "at_start", "no_data")]
    assert counts == [5, 2, 2, 1, 1]
    np.testing.assert_allclose(found.share, [np.nan, 0.8, 0.6, 0.4, 0.4])
    # (30 + 150 + 6 + 150 + 60) / 5
    assert float(found.restricted_mean) == pytest.approx(79.2)
    assert found.limit.values.tolist()[:2] == [30.0, 60.0] and np.isnan(found.limit[2])
    names = eh.status_names(found.limit_status).values.tolist()
    assert names == ["reached", "reached", "beyond_run"]
    assert found.limit.attrs["units"] == "hours" and found.share.attrs["units"] == "1"


def test_a_quartile_at_the_first_lead_is_no_number():
    data = horizons_of([6.0, 6.0, 30.0, 60.0])
    data["status"][:2] = Status.at_start
    found = eh.time_to_limit(data, last_lead=LAST, first_lead=6.0)
    names = eh.status_names(found.limit_status).values.tolist()
    assert names == ["at_start", "at_start", "reached"]
    assert np.isnan(found.limit.values[:2]).all() and found.limit[2] == 30.0


def test_runs_of_different_length_are_each_censored_at_their_own_end():
    last = xr.DataArray([60.0, 120.0] * 6, dims="start")
    data = horizons_of(np.linspace(20.0, 130.0, 12), last.values)
    last = last.assign_coords(start=data.start)
    found = eh.time_to_limit(data.isel(start=slice(None, None, -1)), last_lead=last)
    limit = np.linspace(20.0, 130.0, 12)
    event = limit <= last.values
    curve = stats.ecdf(scipy_sample(np.minimum(limit, last.values), event)).sf
    np.testing.assert_allclose(found.share, curve.evaluate(found.lead.values), atol=1e-12)
    assert float(found.restricted_to) == 60.0
    assert float(found.restricted_mean) == pytest.approx(np.minimum(limit, 60.0).mean())


def test_few_starts_get_shares_but_no_intervals():
    found = eh.time_to_limit(horizons_of([30.0, 60.0, 90.0]), last_lead=LAST)
    assert found.share[0] == 1.0 and float(found.restricted_mean) == 60.0
    assert np.isnan(found.share_low).all() and np.isnan(found.limit_high).all()
    assert np.isnan(found.restricted_mean_low)
    assert Reason(int(found.interval_reason)).name == "few_starts"
    assert "few_starts" in found.interval_reason.attrs["flag_meanings"]


def test_limits_beyond_every_run_tell_of_no_scatter():
    found = eh.time_to_limit(horizons_of(np.full(20, 500.0)), last_lead=LAST)
    assert (found.share == 1).all() and np.isnan(found.share_low).all()
    assert float(found.restricted_mean) == LAST
    assert (found.limit_status == Status.beyond_run).all() and np.isnan(found.limit).all()
    assert Reason(int(found.interval_reason)).name == "no_scatter"


def test_nothing_but_missing_starts_is_no_data():
    data = horizons_of(np.full((12, 2), 60.0), place=["north", "south"])
    data["status"][:, 1] = Status.no_data
    found = eh.time_to_limit(data, last_lead=LAST)
    assert (found.limit_status.sel(place="south") == Status.no_data).all()
    assert int(found.starts.sel(place="south")) == 0 and found.no_data.values.tolist() == [0, 12]
    assert np.isnan(found.share.sel(place="south")).all()


def test_the_last_lead_comes_from_the_dataset_where_it_has_leads():
    data = horizons_of([30.0, 60.0, 500.0]).assign_coords(lead=[6.0, LAST])
    found = eh.time_to_limit(data)
    assert float(found.restricted_mean) == pytest.approx((30 + 60 + LAST) / 3)
    assert found.lead.values[[0, -1]].tolist() == [6.0, LAST]


@pytest.mark.parametrize(
    ("change", "message"),
    [
        (lambda data: data.isel(start=[0]), "horizons: expected several starts; found 1"),
        (lambda data: data.drop_vars("status"), "with horizon and status; found variables"),
        (lambda data: data.isel(start=[0, 0, 1]), "every start once; found .*2024-01-01T00:00"),
        (lambda data: data.assign(horizon=data.horizon + 100), "last_lead: expected a lead at or"),
    ],
)
def test_what_cannot_be_counted_is_refused(change, message):
    data = horizons_of([30.0, 60.0, 90.0])
    with pytest.raises(ArgumentError, match=message):
        eh.time_to_limit(change(data), last_lead=LAST)


def test_an_unknown_end_of_the_runs_is_asked_for():
    with pytest.raises(ArgumentError, match=r"last_lead: expected the lead at which.*Next: pass"):
        eh.time_to_limit(horizons_of([30.0, 60.0]))
    with pytest.raises(ArgumentError, match="last_lead: expected a finite lead after the first, 6"):
        eh.time_to_limit(horizons_of([1.0, 2.0]), last_lead=6.0, first_lead=6.0)


def gaussian_limits(rng, starts, series, memory):
    shocks = rng.standard_normal((starts, series))
    shocks[1:] *= np.sqrt(1 - memory**2)
    return 100.0 + 30.0 * lfilter([1.0], [1.0, -memory], shocks, axis=0)


def inside(low, high, truth):
    return ((low <= truth) & (high >= truth)).mean("series")


@pytest.mark.parametrize("starts", [30, 60])
@pytest.mark.parametrize("memory", [0.0, 0.5])
def test_intervals_cover_the_truth_though_starts_depend_on_each_other(starts, memory):
    limits = gaussian_limits(np.random.default_rng(starts), starts, 2000, memory)
    leads = np.array([80.0, 100.0, 120.0])
    found = eh.time_to_limit(
        horizons_of(limits, series=np.arange(2000)), last_lead=LAST, leads=leads
    )
    truth = xr.DataArray(1 - special.ndtr((leads - 100) / 30), coords={"lead": leads})
    shares = inside(found.share_low, found.share_high, truth)
    quartiles = 100 + 30 * special.ndtri(found["quantile"])
    medians = inside(found.limit_low, found.limit_high, quartiles)
    mean = integrate.quad(lambda lead: 1 - special.ndtr((lead - 100) / 30), 0, LAST)[0]
    means = inside(found.restricted_mean_low, found.restricted_mean_high, mean)
    print(f"\n{starts} starts, AR(1) {memory}: {shares.values} {medians.values} {float(means)}")
    # Shares of few starts take few values, so that their intervals cover a little more.
    assert shares.min() >= 0.87 and shares.max() <= 0.95
    assert medians.min() >= 0.87 and medians.max() <= 0.95
    assert 0.87 <= means <= 0.93
