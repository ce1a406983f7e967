"""Hours gained between two versions: size, coverage and power on known truth; refusals."""

import numpy as np
import pytest
import xarray as xr
from scipy import stats
from scipy.signal import lfilter

import ensemble_horizon as eh
from ensemble_horizon import ArgumentError, Status
from ensemble_horizon.serial import Reason

LAST = 150.0
START = np.datetime64("2024-01-01", "ns")
DAY = np.timedelta64(1, "D")


def horizons_of(limit, first=0, last=LAST, **dims):
    limit = np.asarray(limit, dtype=float)
    status = np.where(limit > last, Status.beyond_run, Status.reached).astype(np.int8)
    names = ("start", *dims)
    return xr.Dataset(
        {
            "horizon": (names, np.where(limit > last, np.nan, limit), {"units": "hours"}),
            "status": (names, status),
        },
        coords={"start": START + (first + np.arange(limit.shape[0])) * DAY, **dims},
        attrs={"criterion": "tolerance 2.5"},
    )


def autoregressive(rng, shape, memory):
    shocks = rng.standard_normal(shape)
    shocks[1:] *= np.sqrt(1 - memory**2)
    return lfilter([1.0], [1.0, -memory], shocks, axis=0)


def two_versions(rng, starts, series, memory, gain=0.0, correlation=0.8):
    """True limits of both: about 100 +- 30 hours, one in twenty beyond the run, alike by start."""
    shared, own_a, own_b = (autoregressive(rng, (starts, series), memory) for _ in range(3))
    rest = np.sqrt(1 - correlation**2)
    old = 100 + 30 * (correlation * shared + rest * own_a)
    return old, 100 + gain + 30 * (correlation * shared + rest * own_b)


def compared(old, new, **options):
    series = np.arange(old.shape[1])
    pair = (horizons_of(limit, series=series) for limit in (old, new))
    return eh.compare_horizons(*pair, last_lead=LAST, **options)


@pytest.mark.parametrize("starts", [30, 60])
@pytest.mark.parametrize("memory", [0.0, 0.5])
def test_equal_versions_show_a_gain_five_times_in_a_hundred(starts, memory):
    found = compared(*two_versions(np.random.default_rng(starts), starts, 4000, memory))
    false_gains = float((found.p_value < 0.05).mean())
    covered = float(((found.gained_low <= 0) & (found.gained_high >= 0)).mean())
    print(f"\n{starts} starts, AR(1) {memory}: false gains {false_gains}, coverage {covered}")
    assert 0.035 <= false_gains <= 0.065
    assert 0.87 <= covered <= 0.93
    assert (found.reason == Reason.given).all()


def test_equal_versions_with_most_limits_beyond_the_run_show_no_gain():
    old, new = two_versions(np.random.default_rng(4), 60, 4000, 0.5)
    found = compared(old + 60, new + 60)
    assert float(found.beyond_a.mean()) > 35
    given = found.reason == Reason.given
    assert float((found.p_value < 0.05).mean()) <= 0.065
    inside = (found.gained_low <= 0) & (found.gained_high >= 0)
    assert float(inside.where(given).mean()) >= 0.87


@pytest.mark.parametrize(("memory", "gain"), [(0.0, 12.0), (0.5, 18.0)])
def test_a_true_gain_is_found_with_its_sign_and_size(memory, gain):
    # About three standard errors of the mean in both cases.
    old, new = two_versions(np.random.default_rng(7), 60, 2000, memory, gain)
    found = compared(old, new)
    # Restricted means in the long run: what a million starts of the same two show.
    many = two_versions(np.random.default_rng(8), 1, 1_000_000, 0.0, gain)
    truth = np.minimum(many[1], LAST).mean() - np.minimum(many[0], LAST).mean()
    assert 0.8 * gain < truth < gain
    assert float(found.gained.mean()) == pytest.approx(truth, abs=0.3)
    covered = float(((found.gained_low <= truth) & (found.gained_high >= truth)).mean())
    assert 0.87 <= covered <= 0.93
    assert float(((found.p_value < 0.05) & (found.gained > 0)).mean()) > 0.6
    assert float((found.gained_high < 0).mean()) < 0.001
    back = compared(new, old)
    np.testing.assert_allclose(back.gained, -found.gained)
    np.testing.assert_allclose(back.gained_low, -found.gained_high)


def test_numbers_by_hand_and_log_rank_by_scipy():
    rng = np.random.default_rng(1)
    old, new = two_versions(rng, 40, 3, 0.0, gain=10.0)
    found = compared(old, new)
    for series in range(3):
        a, b = old[:, series], new[:, series]
        assert found.mean_a[series] == pytest.approx(np.minimum(a, LAST).mean())
        assert found.mean_b[series] == pytest.approx(np.minimum(b, LAST).mean())
        assert found.gained[series] == pytest.approx(
            float(found.mean_b[series] - found.mean_a[series])
        )
        assert found.beyond_a[series] == (a > LAST).sum()
        samples = [
            stats.CensoredData.right_censored(np.minimum(limit, LAST), limit > LAST)
            for limit in (a, b)
        ]
        assert found.log_rank_p[series] == pytest.approx(stats.logrank(*samples).pvalue)
    assert found.gained.attrs["units"] == found.mean_a.attrs["units"] == "hours"
    assert found.attrs["criterion"] == "tolerance 2.5"


def test_only_common_starts_count_and_the_others_are_named():
    rng = np.random.default_rng(2)
    limit = rng.uniform(50, 120, 20)
    a = horizons_of(limit)
    b = horizons_of(np.append(limit[3:] + 6, [500.0, 500.0]), first=3)
    found = eh.compare_horizons(a, b.isel(start=slice(None, None, -1)), last_lead=LAST)
    assert int(found.starts) == 17 and float(found.gained) == pytest.approx(6.0)
    assert found.attrs["starts_only_in_a"].split(", ") == [
        "2024-01-01T00:00", "2024-01-02T00:00", "2024-01-03T00:00",
    ]  # fmt: skip
    assert found.attrs["starts_only_in_b"] == "2024-01-21T00:00, 2024-01-22T00:00"
    assert Reason(int(found.reason)).name == "no_scatter" and np.isnan(found.p_value)


def test_a_start_without_data_in_one_counts_in_neither():
    a, b = (horizons_of(np.full(12, value)) for value in (60.0, 66.0))
    b["status"][0], b["horizon"][0] = Status.no_data, np.nan
    a["horizon"][0] = 149.0
    found = eh.compare_horizons(a, b, last_lead=LAST)
    assert int(found.starts) == 11
    assert float(found.mean_a) == 60.0 and float(found.gained) == 6.0


def test_the_shorter_runs_say_how_far_horizons_count():
    rng = np.random.default_rng(3)
    limit = rng.uniform(60, 240, 30)
    a, b = horizons_of(limit, last=120.0), horizons_of(limit, last=240.0)
    found = eh.compare_horizons(a, b, last_lead=(120.0, 240.0))
    assert float(found.restricted_to) == 120.0
    assert float(found.gained) == 0.0 and int(found.beyond_b) == int(found.beyond_a)
    with_leads = eh.compare_horizons(
        a.assign_coords(lead=np.arange(0.0, 121.0, 6)),
        b.assign_coords(lead=np.arange(0.0, 241.0, 6)),
    )
    assert float(with_leads.restricted_to) == 120.0


def test_few_starts_give_a_mean_without_a_verdict():
    found = eh.compare_horizons(
        horizons_of([60.0, 70.0, 80.0]), horizons_of([66.0, 70.0, 92.0]), last_lead=LAST
    )
    assert float(found.gained) == 6.0 and np.isnan(found.gained_low)
    assert Reason(int(found.reason)).name == "few_starts"


def test_the_order_of_dimensions_does_not_matter():
    rng = np.random.default_rng(5)
    limits = rng.uniform(60, 200, (2, 25, 4, 3))
    a, b = (horizons_of(x, latitude=np.arange(4.0), place=["n", "s", "w"]) for x in limits)
    found = eh.compare_horizons(a, b, last_lead=LAST)
    turned = eh.compare_horizons(a.transpose("place", "latitude", "start"), b, last_lead=LAST)
    xr.testing.assert_allclose(found, turned.transpose(*found.gained.dims))
    alone = eh.compare_horizons(
        a.isel(latitude=2, place=1), b.isel(latitude=2, place=1), last_lead=LAST
    )
    for name in ("gained", "gained_low", "p_value", "log_rank_p", "beyond_b"):
        assert float(found[name].isel(latitude=2, place=1)) == pytest.approx(float(alone[name]))


@pytest.mark.parametrize(
    ("first", "second", "message"),
    [
        (
            horizons_of([1.0, 2.0]),
            horizons_of([1.0, 2.0, 3.0], first=400),
            "a and b: expected starts that both have; found a: 2 starts from 2024-01-01T00:00 to "
            "2024-01-02T00:00; b: 3 starts from 2025-02-04",
        ),
        (
            horizons_of([1.0, 2.0]),
            horizons_of([1.0, 2.0]).assign_coords(start=[0, 1]),
            "a and b: expected starts that both have",
        ),
        (
            horizons_of([1.0, 2.0]).isel(start=[0, 1, 1]),
            horizons_of([1.0, 2.0]),
            r"a\['start'\]: expected every start once; found twice or more: 2024-01-02",
        ),
        (
            horizons_of([1.0, 2.0]).drop_vars("start"),
            horizons_of([1.0, 2.0]),
            r"a\['start'\]: expected the times of the starts, to pair them by",
        ),
        (
            horizons_of([[1.0], [2.0]], latitude=[0.0]),
            horizons_of([[1.0], [2.0]], latitude=[5.0]),
            "expected the same points.*found other values of latitude.*Next: interpolate",
        ),
        (
            horizons_of([1.0, 2.0]),
            horizons_of([1.0, 2.0]).drop_vars("status"),
            "b: expected the dataset that horizon gives",
        ),
    ],
)
def test_what_cannot_be_paired_is_refused(first, second, message):
    with pytest.raises(ArgumentError, match=message):
        eh.compare_horizons(first, second, last_lead=LAST)


def test_other_units_are_refused():
    a, b = horizons_of([1.0, 2.0]), horizons_of([1.0, 2.0])
    b["horizon"].attrs["units"] = "days"
    with pytest.raises(ArgumentError, match="same units; found a: hours; b: days"):
        eh.compare_horizons(a, b, last_lead=LAST)
