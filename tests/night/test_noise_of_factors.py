"""Noise of calibration factors in the hours gained: closed forms, and coverage of a known truth."""

import numpy as np
import pytest
import xarray as xr
from scipy import stats

from ensemble_horizon import ArgumentError, compare_horizons
from ensemble_horizon.horizon.horizon import judge
from ensemble_horizon.night.calibrated import Factors
from ensemble_horizon.night.comparison.factors import CalibratedVersion, factor_noise
from ensemble_horizon.serial import mean_noise
from ensemble_horizon.skill.factor import spread_factor

LEAD = 6.0 * np.arange(41)
RATE, TOLERANCE, SATURATION = 0.03, 2.0, 5.0
SPAN = (0.0, 240.0)
STARTS = 24


def exponential(limits):
    """Spread (start, lead) that passes the tolerance at the limits (start,)."""
    return TOLERANCE * np.exp(RATE * (LEAD - np.asarray(limits, float)[:, np.newaxis]))


def logistic(limits):
    """Spread (start, lead) that passes half of its saturation at the limits (start,)."""
    return SATURATION / (1 + np.exp(-RATE * (LEAD - np.asarray(limits, float)[:, np.newaxis])))


def version(spread, error, *, kind="tolerance", threshold=TOLERANCE, law="logistic", length=np.inf):
    """A version whose ln(factor) has a standard error, correlated over so many leads."""
    shape = (spread.shape[0], 1, 1)
    limits, status = judge(
        LEAD, spread.T, np.full(shape[0], threshold), 0.0, lambda rows: np.ones(rows.size, bool)
    )
    dims = ("start", "place", "criterion")
    curves = xr.Dataset(
        {
            "spread": (("start", "place", "lead"), spread[:, np.newaxis]),
            "threshold": (dims, np.full(shape, threshold)),
            "saturation": (("start", "place"), np.full(shape[:2], SATURATION)),
            "horizon": (dims, limits.reshape(shape), {"units": "hours"}),
            "status": (dims, status.reshape(shape)),
        },
        coords={
            "start": np.arange(shape[0]), "place": ["domain"], "criterion": ["one"], "lead": LEAD,
            "criterion_kind": ("criterion", [kind]),
        },
    )  # fmt: skip
    apart = np.abs(LEAD - LEAD[:, np.newaxis])
    shape = (LEAD.size, 1)
    variance = np.full(shape, (2 * error) ** 2)  # of ln(factor^2)
    factors = Factors(np.ones(shape), variance, np.exp(-apart / length))
    return CalibratedVersion(curves, factors, law, "log", 0.0, 40)


def variance_of(*versions):
    found = factor_noise(versions, SPAN)
    assert found.variance.dims == ("place", "criterion")
    return float(found.variance[0, 0])


@pytest.fixture
def limits():
    return np.random.default_rng(2).uniform(60, 150, STARTS)


def test_one_error_at_all_leads_moves_limits_by_error_over_rate(limits):
    # dT = -d ln f / rate for an exponential; the two versions are independent.
    a, b = version(exponential(limits), 0.1), version(exponential(limits + 20), 0.2)
    assert variance_of(a, b) == pytest.approx((0.1**2 + 0.2**2) / RATE**2, rel=0.01)
    assert variance_of(a, None) == pytest.approx((0.1 / RATE) ** 2, rel=0.01)
    assert variance_of(None, b) == pytest.approx((0.2 / RATE) ** 2, rel=0.01)
    assert factor_noise((None, None), SPAN) is None


def test_errors_of_other_leads_matter_as_they_are_correlated(limits):
    # The mean of e(T_i)/rate over starts has variance sum of cov(T_i, T_j) / (n rate)^2.
    length = 50.0
    found = variance_of(version(exponential(limits), 0.1, length=length), None)
    covariance = 0.01 * np.exp(-np.abs(limits - limits[:, np.newaxis]) / length)
    assert found == pytest.approx(covariance.mean() / RATE**2, rel=0.05)


def test_one_file_for_both_cancels_where_both_grow_alike(limits):
    a, b = version(exponential(limits), 0.1), version(exponential(limits + 20), 0.1)
    assert variance_of(a, b) < 1e-3 * (0.1 / RATE) ** 2
    fast = np.sqrt(exponential(limits) * TOLERANCE)  # half the rate, the same limits
    assert variance_of(a, version(fast, 0.1)) == pytest.approx((0.1 / RATE) ** 2, rel=0.02)


def test_what_lies_beyond_the_count_does_not_move(limits):
    late = np.where(np.arange(STARTS) % 2, 400.0, limits)
    found = variance_of(version(exponential(late), 0.1), None)
    assert found == pytest.approx((0.05 / RATE) ** 2, rel=0.02)


def test_shares_of_members_are_not_calibrated(limits):
    assert variance_of(version(exponential(limits), 0.1, kind="chance"), None) == 0


def test_a_fraction_of_the_saturation_goes_with_the_curve(limits):
    a = version(logistic(limits), 0.1, kind="saturation_fraction", threshold=SATURATION / 2)
    assert variance_of(a, None) < 1e-4 * (0.1 / RATE) ** 2
    fixed = version(logistic(limits), 0.1, threshold=SATURATION / 2)
    # There a logistic curve grows at half of its rate.
    assert variance_of(fixed, None) == pytest.approx((0.1 / (RATE / 2)) ** 2, rel=0.03)


def test_the_interval_of_the_gain_takes_it_in(limits):
    rng = np.random.default_rng(3)
    a = version(exponential(limits), 0.1).curves
    b = version(exponential(limits + rng.normal(8, 4, STARTS)), 0.1).curves
    plain = compare_horizons(a, b)
    found = compare_horizons(a, b, shared_variance=9.0, shared_dof=7.0)
    own = mean_noise((b.horizon - a.horizon).values[:, 0, 0, np.newaxis])
    total = float(own.variance[0]) + 9.0
    dof = total**2 / (float(own.variance[0]) ** 2 / float(own.dof[0]) + 9.0**2 / 7.0)
    low, high = stats.t.interval(0.9, dof, float(plain.gained[0, 0]), np.sqrt(total))
    assert float(found.gained_low[0, 0]) == pytest.approx(low)
    assert float(found.gained_high[0, 0]) == pytest.approx(high)
    expected = 2 * stats.t.sf(float(plain.gained[0, 0]) / np.sqrt(total), dof)
    assert float(found.p_value[0, 0]) == pytest.approx(expected)
    assert float(found.shared_error[0, 0]) == 3.0
    assert "shared_error" not in plain
    xr.testing.assert_allclose(
        plain, compare_horizons(a, b, shared_variance=0.0).drop_vars("shared_error")
    )
    for wrong in (-1.0, xr.DataArray([1.0, 2.0], dims="latitude")):
        with pytest.raises(ArgumentError, match="shared_variance: expected variances, on dim"):
            compare_horizons(a, b, shared_variance=wrong)


def estimated(rng, raw, past, truth):
    """Factors found from past starts, whose errors are those of the truth, and curves with them."""
    expected = np.ones((past, LEAD.size, 1))
    whole = rng.gamma(3.0, 1 / 3.0, (past, 1, 1))  # of a start, at all leads
    squared = truth**2 * whole * rng.gamma(6.0, 1 / 6.0, (past, LEAD.size, 1))
    found = spread_factor(LEAD, expected, squared)
    factors = Factors(np.exp(found.log_square / 2), found.log_variance, found.correlation)
    one = version(raw * factors.factor[:, 0], 0.0)
    return CalibratedVersion(one.curves, factors, "logistic", "log", 0.0, past)


@pytest.mark.slow
def test_intervals_with_the_noise_of_the_factors_cover_the_true_gain():
    cases, past = 200, 40
    truth = (np.log(1.2 / 0.9) + 0.2) / RATE  # of factors 1.2 and 0.9, and of ln(spread), 0.2
    covered = {"with": 0, "without": 0}
    for case in range(cases):
        rng = np.random.default_rng(case)
        limits = rng.uniform(90, 150, STARTS)
        later = limits + 0.2 / RATE + rng.normal(0, 6, STARTS)
        a = estimated(rng, exponential(limits), past, 1.2)
        b = estimated(rng, exponential(later), past, 0.9)
        noise = factor_noise((a, b), SPAN)
        for name, shared in (("with", noise.variance), ("without", None)):
            found = compare_horizons(
                a.curves, b.curves, shared_variance=shared, shared_dof=noise.dof
            )
            low, high = float(found.gained_low[0, 0]), float(found.gained_high[0, 0])
            covered[name] += low < truth < high
    # Three standard errors of a share of 0.9 over 200 cases: 0.064.
    assert covered["with"] / cases == pytest.approx(0.9, abs=0.064)
    assert covered["without"] / cases < 0.7
