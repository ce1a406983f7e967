"""Limits and intervals beside leads without a value or without spread, and at odd leads."""

import numpy as np
import pytest
import xarray as xr

import ensemble_horizon as eh
from ensemble_horizon import Status
from ensemble_horizon.horizon.criteria import Tolerance
from ensemble_horizon.horizon.crossing import first_crossing
from ensemble_horizon.horizon.curve_growth import growth_of_curves
from ensemble_horizon.horizon.curve_limits import Curve, limits_of_curve
from ensemble_horizon.horizon.interval import calibrated_moves, move_table
from ensemble_horizon.horizon.map_limits import MapOptions, PointBatch, limits_of_points
from ensemble_horizon.spread.moments import member_deviations, member_variance
from ensemble_horizon.spread.sampling import LeadNoise, noise_from_gram

LEAD = np.arange(0.0, 61.0, 6.0)


def members():
    """Members (L, M) of one site, parting at a rate of 0.03 an hour."""
    rng = np.random.default_rng(0)
    return rng.normal(size=20) * np.exp(0.03 * LEAD)[:, np.newaxis] + 0.05 * rng.normal(
        size=(LEAD.size, 20)
    )


def judged(values, tolerance):
    deviation = member_deviations(values.T)[0].T
    noise = noise_from_gram(deviation[:, :, np.newaxis] * deviation[:, np.newaxis])
    curve = Curve(np.sqrt(member_variance(values.T)[0]), noise)
    lead = LEAD[: values.shape[0]]
    growth = growth_of_curves(lead, curve.spread[np.newaxis], [noise], "auto", "log", 0.9)[0]
    return growth, limits_of_curve(lead, curve, growth, [Tolerance(tolerance)], 0.0, 0.9)[0]


def test_a_lost_lead_does_not_stop_growth_from_being_seen():
    values = members()
    values[3] = np.nan
    growth, limit = judged(values, 100.0)
    assert limit.status is Status.beyond_run
    assert growth.values["growth_rate_low"] < 0.03 < growth.values["growth_rate_high"]
    whole, _ = judged(members(), 100.0)
    width, expected = (
        item.values["growth_rate_high"] - item.values["growth_rate_low"] for item in (growth, whole)
    )
    assert width == pytest.approx(expected, rel=0.5)


def test_a_crossing_beside_a_lost_lead_has_an_interval():
    values = members()
    values[3] = np.nan
    _, limit = judged(values[:4], float(values[:3].std(axis=1, ddof=1)[-1]) * 0.95)
    assert limit.low < limit.horizon < limit.high
    curve = xr.DataArray(np.exp(0.05 * LEAD), dims="lead", coords={"lead": LEAD})
    curve[5] = np.nan
    noise = LeadNoise(np.full(LEAD.size, 19.0), np.eye(LEAD.size) * 0.1 + 0.9)
    sampling = xr.Dataset(
        {"dof": ("lead", noise.dof), "noise_correlation": (("lead", "other"), noise.correlation)}
    )
    found = eh.horizon(curve, tolerance=float(np.exp(0.05 * 30.0)), sampling=sampling)
    assert 20 < found.low < found.horizon < found.high < 40


def test_a_crossing_in_the_first_step_from_no_spread_has_an_interval():
    values = members()
    values[0] = 1.0
    _, limit = judged(values[:4], 0.3)
    assert 0 < limit.low < limit.horizon < limit.high < 6


def test_exceeded_at_the_first_known_lead_is_no_earlier_than_that_at_the_high_end():
    values = members()
    values[0] = np.nan
    _, limit = judged(values, 0.2)
    assert (limit.status, limit.low, limit.high) == (Status.at_start, 0.0, 6.0)


def test_a_crossing_lies_never_beyond_the_lead_that_shows_it():
    for first in np.arange(1, 200) * 0.05 / 7:
        lead = np.array([first, 14 * first + 0.03])
        time = first_crossing(lead, np.array([[1.0], [2.0]]), 2.0).time[0]
        assert time <= lead[1]


def test_no_growth_has_no_interval():
    curve = xr.DataArray(1 + 0.001 * np.cos(LEAD), dims="lead", coords={"lead": LEAD})
    sampling = xr.Dataset(
        {
            "dof": ("lead", np.full(LEAD.size, 19.0)),
            "noise_correlation": (("lead", "other"), np.eye(LEAD.size)),
        }
    )
    found = eh.horizon(curve, tolerance=1.2, sampling=sampling)
    assert int(found.status) == Status.no_growth
    assert np.isnan(found.low) and np.isnan(found.high)


def test_doubling_times_of_curves_and_maps_are_those_of_the_law():
    # Brisch and Kantz 2019: from E0 to 2 E0 a power law takes ((2 E0)^p - E0^p) / (c p).
    curve = (0.1**0.5 + 0.02 * 0.5 * LEAD) ** 2
    expected = (0.2**0.5 - 0.1**0.5) / (0.02 * 0.5)
    noise = LeadNoise(np.full(LEAD.size, 19.0), np.eye(LEAD.size) * 0.1 + 0.9)
    single = growth_of_curves(LEAD, curve[np.newaxis], [noise], "power", "log", 0.9)[0].values
    batch = PointBatch(
        LEAD, curve[:, np.newaxis] ** 2, noise, block=np.zeros(1, int), noises=(noise,)
    )
    options = MapOptions((Tolerance(0.2),), 0.0, "power", "log", None, 20)
    assert single["doubling_time"] == pytest.approx(expected, rel=1e-6)
    assert limits_of_points(batch, options)["doubling_time"][0] == pytest.approx(expected, rel=1e-6)
    assert single["doubling_time_low"] < expected < single["doubling_time_high"]


def test_a_size_that_the_curve_does_not_tell_is_open_on_both_sides():
    curve = (0.02 * 0.5 * LEAD) ** 2
    noise = LeadNoise(np.full(LEAD.size, 19.0), np.eye(LEAD.size) * 0.1 + 0.9)
    found = growth_of_curves(LEAD, curve[np.newaxis], [noise], "power", "linear", 0.9)[0].values
    low, high = found["initial_error_low"], found["initial_error_high"]
    assert (np.isnan(low) and np.isnan(high)) or (low <= found["initial_error"] <= high)


def test_moves_at_uneven_leads_agree_with_those_of_a_single_curve():
    # One noise draw, two ways to the moves: tabulated by steepness, and from the curve itself.
    lead = np.concatenate([np.arange(8.0), 7 + 12.0 * np.arange(1, 5)])
    noise = LeadNoise(np.full(lead.size, 19.0), np.eye(lead.size))
    scale = np.sqrt(noise.log_spread_covariance()[0, 0])
    before, steepness = 7, 0.8  # the first step of 12 after seven of 1
    rate = steepness * scale / 12
    # Linear in ln(spread) about the crossing, midway between the two leads.
    middle = (lead[before] + lead[before + 1]) / 2
    center = np.exp(rate * (lead - middle))
    threshold = (center[before] + center[before + 1]) / 2
    single = calibrated_moves(lead, center, threshold, noise, 0.9)
    table = move_table(lead, noise, 0.9).look_up(np.array([before]), np.array([steepness]))
    regular = move_table(12.0 * np.arange(12.0), noise, 0.9)
    off = regular.look_up(np.array([before]), np.array([steepness]))
    assert table.up[0] == pytest.approx(single.up, abs=0.08)
    assert table.down[0] == pytest.approx(single.down, abs=0.08)
    assert abs(off.down[0] - single.down) > 0.2  # even steps would not do
