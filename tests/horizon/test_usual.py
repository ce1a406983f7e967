"""Usual limits: against numpy, scipy and statsmodels, and by hand where nights are censored."""

from __future__ import annotations

import itertools

import numpy as np
import pytest
from scipy import stats
from statsmodels.duration.survfunc import SurvfuncRight

from ensemble_horizon.errors import ArgumentError
from ensemble_horizon.horizon.usual import LEAST_NIGHTS, NightHorizon, Standing, usual_of
from ensemble_horizon.vocabulary import Status

LAST = 240.0
INF = float("inf")
NOTHING = float("nan")


def night(status, horizon=NOTHING, last=LAST):
    return NightHorizon(horizon, int(status), last)


def reached(horizon, last=LAST):
    return night(Status.reached, horizon, last)


BEYOND = night(Status.beyond_run)
AT_START = night(Status.at_start)
NO_DATA = night(Status.no_data)


def usual(nights, tonight=NO_DATA, **options):
    horizon, status, last = (np.array(column) for column in zip(*nights, strict=True))
    options = {"first_lead": 0.0, **options}
    return usual_of(horizon, status, last, tonight=tonight, **options)


def quantiles(found):
    return [found.low, found.median, found.high]


@pytest.mark.parametrize("count", [10, 11, 15, 20, 29, 30, 31, 365])
def test_uncensored_nights_have_the_quantiles_of_numpy(count):
    # Definition 2 of Hyndman and Fan 1996 (The American Statistician 50, 361 to 365).
    rng = np.random.default_rng(count)
    horizons = np.round(rng.gamma(9.0, 8.0, count).clip(1, LAST), 1)  # rounded, so that some tie
    found = usual([reached(value) for value in horizons])
    expected = np.quantile(horizons, [0.1, 0.5, 0.9], method="averaged_inverted_cdf")
    np.testing.assert_allclose(quantiles(found), expected, rtol=1e-12)
    assert found.nights == count and found.without_data == 0 and not found.season


@pytest.mark.parametrize("seed", range(5))
def test_nights_beyond_runs_of_equal_length_are_the_longest(seed):
    rng = np.random.default_rng(seed)
    true = rng.gamma(6.0, 30.0, 40)
    nights = [reached(value) if value <= LAST else BEYOND for value in true]
    assert 0 < sum(item is BEYOND for item in nights) < 40
    # Infinite values sort last; numpy averages a finite and an infinite one to infinity.
    with np.errstate(invalid="ignore"):
        expected = np.quantile(np.where(true <= LAST, true, INF), [0.1, 0.5, 0.9],
                               method="inverted_cdf")  # fmt: skip
    # 40 tenths are whole numbers of nights: the average with the next one is by hand.
    later = np.sort(np.where(true <= LAST, true, INF))[[4, 20, 36]]
    np.testing.assert_allclose(quantiles(usual(nights)), (expected + later) / 2, rtol=1e-12)


@pytest.mark.parametrize("seed", range(6))
def test_runs_of_unequal_length_have_the_quantiles_of_statsmodels(seed):
    rng = np.random.default_rng(seed)
    true, last = rng.gamma(6.0, 20.0, 37), rng.choice([96.0, 120.0, LAST], 37)
    event = true <= last
    nights = [
        reached(value, end) if met else night(Status.beyond_run, last=end)
        for value, end, met in zip(true, last, event, strict=True)
    ]
    curve = SurvfuncRight(np.where(event, true, last), event.astype(int))
    found = usual(nights)
    for share, value in zip((0.1, 0.5, 0.9), quantiles(found), strict=True):
        # statsmodels gives NaN for a quantile that the curve does not come down to.
        expected = curve.quantile(share)
        assert value == (INF if np.isnan(expected) else expected)


def test_a_share_that_falls_between_two_nights_is_their_mean_by_product_limit():
    # By hand: 12 nights, 3 met: 3/4 still within their limit. 3 runs end unmet at 35 h, 6 are left.
    # After 40 h 3/4 5/6 = 5/8, after 50 h 3/4 4/6 = 1/2 exactly: between 50 and 60 h.
    nights = [reached(value) for value in (10, 20, 30, 40, 50, 60, 70, 80, 90)]
    found = usual([*nights, *[night(Status.beyond_run, last=35.0)] * 3])
    assert quantiles(found) == [20.0, 55.0, 90.0]
    # Mid-rank at 50 h: the mean of 3/8 before and 1/2 after.
    assert usual([*nights, *[night(1, last=35.0)] * 3], reached(50.0)).percentile == 43.75


def test_a_quantile_among_censored_nights_is_beyond_the_run():
    nights = [reached(10.0 * n) for n in range(1, 9)]
    found = usual([*nights, *[BEYOND] * 12])
    assert quantiles(found) == [25.0, INF, INF]
    assert quantiles(usual([BEYOND] * 12)) == [INF, INF, INF]


def test_no_growth_counts_as_beyond_the_run():
    nights = [reached(10.0 * n) for n in range(1, 13)]
    still = night(Status.no_growth)
    assert repr(usual([*nights, *[still] * 4])) == repr(usual([*nights, *[BEYOND] * 4]))
    assert repr(usual(nights, still)) == repr(usual(nights, BEYOND))


def test_nights_at_start_are_at_most_the_first_lead():
    nights = [reached(10.0 * n) for n in range(1, 9)]
    found = usual([*nights, *[AT_START] * 12], first_lead=6.0)
    assert quantiles(found) == [6.0, 6.0, 65.0]


def test_nights_without_data_are_left_out_and_counted():
    nights = [reached(10.0 * n) for n in range(1, 13)]
    found = usual([*nights, *[NO_DATA] * 7])
    assert (found.nights, found.without_data) == (12, 7)
    assert quantiles(found) == quantiles(usual(nights))


def test_too_few_nights_tell_nothing():
    nights = [reached(10.0 * n) for n in range(1, LEAST_NIGHTS)]
    found = usual([*nights, NO_DATA], reached(1.0), season=True)
    assert found.standing is Standing.unknown and found.season
    assert np.isnan([*quantiles(found), found.percentile, *found.percentile_bounds]).all()
    assert (found.nights, found.without_data) == (LEAST_NIGHTS - 1, 1)
    assert usual(nights, reached(1.0), least=9).standing is Standing.shorter
    none = usual_of(np.empty(0), np.empty(0), np.empty(0), first_lead=0.0, tonight=AT_START)
    assert none.nights == 0 and none.standing is Standing.unknown


@pytest.mark.parametrize("tonight", [5.0, 37.0, 40.0, 60.0, 61.5, 120.0, 239.0])
def test_the_percentile_is_the_mid_rank_of_scipy(tonight):
    horizons = [20.0, 40, 40, 40, 60, 60, 70, 80, 90, 100, 110, 120]
    found = usual([reached(value) for value in horizons], reached(tonight))
    # kind "mean": the mean of the shares below, and below or equal.
    expected = stats.percentileofscore(horizons, tonight, kind="mean")
    assert found.percentile == pytest.approx(expected, abs=1e-8)
    assert found.percentile_bounds == (found.percentile, found.percentile)
    # Censored nights of the same run are longer, whatever they were.
    found = usual([*map(reached, horizons), BEYOND, BEYOND], reached(tonight))
    expected = stats.percentileofscore([*horizons, INF, INF], tonight, kind="mean")
    assert found.percentile == pytest.approx(expected, abs=1e-8)


def test_the_percentile_is_bounded_where_censoring_leaves_it_open():
    nights = [reached(10.0 * n) for n in range(1, 10)]
    several = [AT_START, *nights, BEYOND, BEYOND]
    found = usual(several, BEYOND)
    assert np.isnan(found.percentile)
    assert found.percentile_bounds == pytest.approx((100 * 10 / 12, 100.0))
    found = usual(several, AT_START)
    assert np.isnan(found.percentile)
    assert found.percentile_bounds == pytest.approx((0.0, 100 / 12))
    # Where all other nights met their limit, or none did at the start, nothing is left open.
    assert usual([*nights, reached(5.0)], BEYOND).percentile == 100.0
    assert usual([*nights, reached(5.0)], AT_START).percentile == 0.0
    assert np.isnan(usual(several, NO_DATA).percentile_bounds).all()
    # Tonight's run is longer than all before, and its limit later than any of them can tell.
    found = usual([*nights, BEYOND], reached(300.0, last=360.0))
    assert np.isnan(found.percentile) and found.percentile_bounds == (90.0, 100.0)


NIGHTS = [reached(10.0 * n) for n in range(1, 21)]  # low 25, high 185
HALF = [*NIGHTS[:10], *[BEYOND] * 10]  # low 25, high beyond the run
EARLY = [*[AT_START] * 5, *NIGHTS[:15]]  # low at most the first lead, high 135
STEADY = [BEYOND] * 20  # all beyond the run


@pytest.mark.parametrize(
    ("past", "tonight", "standing"),
    [
        (NIGHTS, reached(24.9), "shorter"),
        (NIGHTS, reached(25.0), "usual"),
        (NIGHTS, reached(185.0), "usual"),
        (NIGHTS, reached(185.1), "longer"),
        (NIGHTS, BEYOND, "longer"),
        (NIGHTS, AT_START, "shorter"),
        (NIGHTS, NO_DATA, "unknown"),
        # Runs that end early: beyond 185 h is longer, beyond 100 h not shorter, perhaps longer.
        (NIGHTS, night(Status.beyond_run, last=185.0), "longer"),
        (NIGHTS, night(Status.beyond_run, last=100.0), "unknown"),
        (NIGHTS, night(Status.beyond_run, last=20.0), "unknown"),
        (HALF, reached(20.0), "shorter"),
        (HALF, reached(200.0), "usual"),
        (HALF, BEYOND, "usual"),
        (HALF, night(Status.beyond_run, last=120.0), "usual"),
        (HALF, night(Status.beyond_run, last=360.0), "unknown"),
        (HALF, reached(300.0, last=360.0), "unknown"),
        (EARLY, AT_START, "usual"),
        (EARLY, reached(1.0), "usual"),
        (EARLY, BEYOND, "longer"),
        (STEADY, BEYOND, "usual"),
        (STEADY, reached(239.0), "shorter"),
        (STEADY, AT_START, "shorter"),
        (STEADY, reached(300.0, last=360.0), "unknown"),
        (STEADY, night(Status.beyond_run, last=120.0), "unknown"),
    ],
)
def test_standing_outside_the_range_only_where_that_is_certain(past, tonight, standing):
    assert usual(past, tonight).standing == standing


def test_a_standing_holds_whatever_the_censored_limits_were():
    # Brute force over what the censored values may have been, with the quantiles of numpy.
    values = (10.0, 30.0, 50.0, 70.0, 90.0, 110.0, 130.0)
    rng = np.random.default_rng(3)
    told = set()
    for _ in range(60):
        true, last = rng.choice(values, 11), 80.0
        past = [reached(v, last) if v < last else night(1, last=last) for v in true[:10]]
        own = reached(true[10], last) if true[10] < last else night(1, last=last)
        standing = usual(past, own).standing
        told.add(standing)
        censored = np.flatnonzero(true > last)
        for later in itertools.product((85.0, 95.0, 1e6), repeat=min(censored.size, 4)):
            guess = true.copy()
            guess[censored[: len(later)]] = later
            low, high = np.quantile(guess[:10], [0.1, 0.9], method="averaged_inverted_cdf")
            if standing is Standing.shorter:
                assert guess[10] < low
            if standing is Standing.longer:
                assert guess[10] > high
    assert {Standing.shorter, Standing.usual} <= told


def test_wrong_arguments_are_named():
    one = np.array([30.0])
    flag = np.array([0])
    good = {"first_lead": 0.0, "tonight": BEYOND}
    with pytest.raises(ArgumentError, match="one value of each for every night"):
        usual_of(np.array([30.0, 40.0]), flag, one * 8, **good)
    with pytest.raises(ArgumentError, match=r"300 in a run that ends at 240"):
        usual_of(np.array([300.0]), flag, np.array([LAST]), **good)
    with pytest.raises(ArgumentError, match="in the same units"):
        usual_of(np.array([NOTHING]), flag, np.array([LAST]), **good)
    with pytest.raises(ArgumentError, match="first lead"):
        usual_of(one, flag, one, first_lead=48.0, tonight=BEYOND)
    with pytest.raises(ArgumentError, match="in a run that ends at nan"):
        usual_of(one, flag, one, first_lead=0.0, tonight=night(Status.beyond_run, last=NOTHING))
