"""Differences of scores by lead, and versions compared from their ensembles."""

import numpy as np
import pytest
import xarray as xr

import ensemble_horizon as eh
from ensemble_horizon import ArgumentError
from ensemble_horizon.serial import serial_mean
from ensemble_horizon.versions.verified import compare_verified

LEAD = np.arange(0.0, 126.0, 6.0)


def scores(values, lead=(24.0, 48.0), first=0, units="K"):
    coord = xr.DataArray(list(lead), dims="lead", attrs={"units": "hours"})
    return xr.DataArray(
        values,
        dims=("start", "lead"),
        coords={"start": first + np.arange(len(values)), "lead": coord},
        attrs={"units": units, "long_name": "CRPS"},
    )


def ensemble(rng, size, members=10, starts=30, lead=LEAD, first=0):
    growth = 0.1 * size * np.exp(0.04 * lead)[:, np.newaxis]
    coord = xr.DataArray(lead, dims="lead", attrs={"units": "hours"})
    return xr.DataArray(
        growth * rng.standard_normal((starts, lead.size, members)),
        dims=("start", "lead", "member"),
        coords={"start": first + np.arange(starts), "lead": coord, "member": np.arange(members)},
        attrs={"units": "K"},
    )


def test_scores_are_compared_lead_by_lead_on_common_starts_and_leads():
    rng = np.random.default_rng(0)
    old = rng.gamma(2.0, size=(40, 3))
    new = old[5:, 1:] - np.array([0.0, 0.5]) + 0.2 * rng.standard_normal((35, 2))
    new[3, 0] = np.nan
    found = eh.compare_scores(
        scores(old, lead=(24.0, 48.0, 72.0)), scores(new, lead=(48.0, 72.0), first=5)
    )
    assert found["lead"].values.tolist() == [48.0, 72.0]
    assert found.starts.values.tolist() == [34, 35]
    assert found.attrs["starts_only_in_a"] == "0, 1, 2, 3, 4"
    reference = serial_mean(new - old[5:, 1:])
    np.testing.assert_allclose(found.difference, reference.mean)
    np.testing.assert_allclose(found.p_value, reference.p_value)
    np.testing.assert_allclose(found.mean_b - found.mean_a, found.difference)
    assert found.p_value[0] > 0.05 and found.difference_high[1] < 0
    assert found.difference.attrs["units"] == "K" and "CRPS" in found.difference.attrs["long_name"]


def test_leads_alike_to_rounding_are_the_same_lead():
    values = np.random.default_rng(1).normal(size=(12, 2))
    found = eh.compare_scores(scores(values), scores(values + 1, lead=(24.0 + 1e-9, 48.0)))
    assert found.difference.values.tolist() == pytest.approx([1.0, 1.0])


def test_scores_without_common_leads_or_units_are_refused():
    values = np.zeros((12, 2))
    with pytest.raises(
        ArgumentError, match=r"leads that both have.*a: 2 leads from 24 to 48 hours"
    ):
        eh.compare_scores(scores(values), scores(values, lead=(6.0, 12.0)))
    days = scores(values)
    days["lead"].attrs["units"] = "days"
    with pytest.raises(ArgumentError, match=r"same units; found .*hours; b: .*days"):
        eh.compare_scores(scores(values), days)
    with pytest.raises(ArgumentError, match="scores in the same units; found a: K; b: degC"):
        eh.compare_scores(scores(values), scores(values, units="degC"))
    with pytest.raises(ArgumentError, match=r"b\['lead'\]: expected a lead coordinate"):
        eh.compare_scores(scores(values), scores(values).drop_vars("lead"))


def test_ensembles_of_two_versions_give_the_hours_gained():
    # Spread size e^(rate t): a factor k less buys ln k / rate whatever the tolerance.
    rng = np.random.default_rng(3)
    old = ensemble(rng, 1.0)
    new = ensemble(rng, 0.7, members=20, lead=LEAD[:-2], first=4)
    found = eh.compare_versions(old, new, tolerance=2.0)
    truth = np.log(1 / 0.7) / 0.04
    assert found.gained_low <= truth <= found.gained_high and found.p_value < 0.01
    assert int(found.starts) == 26 and float(found.restricted_to) == 108.0
    assert found.attrs["starts_only_in_b"] == "30, 31, 32, 33"
    assert found.attrs["criterion"] == "tolerance 2"
    assert found.gained.attrs["units"] == "hours"


def test_ensembles_and_their_horizons_give_the_same():
    rng = np.random.default_rng(4)
    old, new = ensemble(rng, 1.0), ensemble(rng, 0.9)
    found = eh.compare_versions(old, new, chance=0.4, beyond=1.0, hold=6.0)
    limits = (eh.horizon(eh.exceedance(e, 1.0), chance=0.4, hold=6.0) for e in (old, new))
    same = eh.compare_versions(*limits, last_lead=float(LEAD[-1]))
    xr.testing.assert_allclose(found, same)


def test_a_region_is_compared_as_one_curve():
    rng = np.random.default_rng(5)
    space = {"latitude": [50.0, 60.0], "longitude": [0.0, 10.0, 20.0]}
    fields = [
        xr.concat([ensemble(rng, size) for _ in range(6)], "cell")
        .assign_coords(cell=range(6))
        .transpose("start", "lead", "member", "cell")
        for size in (1.0, 0.8)
    ]
    old, new = (
        xr.DataArray(
            field.values.reshape(*field.shape[:3], 2, 3),
            dims=("start", "lead", "member", "latitude", "longitude"),
            coords={"start": field["start"], "lead": field["lead"], **space},
        )
        for field in fields
    )
    region = eh.Region("north", south=55, north=65, west=-5, east=25)
    found = eh.compare_versions(old, new, tolerance=2.0, region=region)
    assert found.gained.dims == ()
    everywhere = eh.compare_versions(old, new, tolerance=2.0)
    assert everywhere.gained.dims == ("latitude", "longitude")
    assert float(found.gained_high - found.gained_low) < float(
        (everywhere.gained_high - everywhere.gained_low).mean()
    )
    with pytest.raises(ArgumentError, match="region: expected no region with chance"):
        eh.compare_versions(old, new, chance=0.3, beyond=1.0, region=region)


def test_an_analysis_tells_which_version_scores_better():
    rng = np.random.default_rng(8)
    old, new = ensemble(rng, 1.0), ensemble(rng, 0.8, members=25, first=3)
    time = np.datetime64("2024-01-01", "ns") + np.arange(33) * np.timedelta64(1, "D")
    old, new = (item.assign_coords(start=time[item.start.values]) for item in (old, new))
    valid = np.unique(time[:, np.newaxis] + (LEAD * 3.6e12).astype("timedelta64[ns]"))
    analysis = xr.DataArray(
        np.zeros(valid.size), dims="valid", coords={"valid": valid}, attrs={"units": "K"}
    )
    found = eh.compare_versions(old, new, analysis, tolerance=2.0)
    # CRPS of a Gaussian at its centre: size (sqrt 2 - 1) / sqrt(pi) (Gneiting and others 2005).
    size = 0.1 * np.exp(0.04 * LEAD) * (np.sqrt(2) - 1) / np.sqrt(np.pi)
    np.testing.assert_allclose(found.crps_a, size, rtol=0.25)
    assert found.crps_difference.dims == ("lead",)
    inside = (found.crps_difference_low <= -0.2 * size) & (
        found.crps_difference_high >= -0.2 * size
    )
    assert inside.mean() >= 0.8
    # Mean of M members about the analysis: size^2 / M; that of 25 is told as if it were of 10.
    square = (0.1 * np.exp(0.04 * LEAD)) ** 2
    inside = (found.squared_error_difference_low <= square * (0.64 / 10 - 1 / 10)) & (
        found.squared_error_difference_high >= square * (0.64 / 10 - 1 / 10)
    )
    assert inside.mean() >= 0.8
    assert found.squared_error_a.attrs["units"] == "(K)2"
    assert found.crps_difference.attrs["units"] == "K" and found.gained.attrs["units"] == "hours"
    assert (found.crps_starts == 27).all() and int(found.starts) == 27
    assert found.attrs["starts_only_in_a"].count("2024") == 3
    without = eh.compare_versions(old, new, tolerance=2.0)
    xr.testing.assert_equal(
        found[list(without.data_vars)].drop_vars("lead", errors="ignore"), without
    )


def test_more_members_alone_do_not_make_a_smaller_squared_error():
    """Members and analysis from one distribution: sigma^2 (1 + 1/M), told as with 4 in both.

    In each case the mean of 4 errs by sigma^2 (1 + 1/4), in closed form; the variance is the
    members' own, so the correction is right on average, not to the digit.
    """
    rng = np.random.default_rng(11)
    coords = {"start": np.arange(4000), "lead": [24.0]}
    few, many = (
        xr.DataArray(
            rng.standard_normal((4000, 1, members)), dims=("start", "lead", "member"), coords=coords
        )
        for members in (4, 40)
    )
    analysis = xr.DataArray(rng.standard_normal((4000, 1)), dims=("start", "lead"), coords=coords)
    found = compare_verified(few, many, analysis, confidence=0.99)
    assert float(found.squared_error_a[0]) == pytest.approx(1.25, abs=0.1)
    assert float(found.squared_error_b[0]) == pytest.approx(1.25, abs=0.1)
    low, high = found.squared_error_difference_low, found.squared_error_difference_high
    assert float(low[0]) < 0 < float(high[0])
    # Uncorrected it would be 1/40 - 1/4, far outside.
    assert float(low[0]) > 1 / 40 - 1 / 4


def test_what_versions_cannot_be_is_refused():
    rng = np.random.default_rng(6)
    old = ensemble(rng, 1.0)
    limits = eh.horizon(eh.spread(old), tolerance=2.0)
    with pytest.raises(ArgumentError, match=r"two ensembles, or two datasets.*one of each"):
        eh.compare_versions(old, limits, tolerance=2.0)
    with pytest.raises(ArgumentError, match="criterion: expected none beside datasets"):
        eh.compare_versions(limits, limits, tolerance=2.0)
    with pytest.raises(ArgumentError, match="criterion: expected exactly one of"):
        eh.compare_versions(old, old)
    with pytest.raises(ArgumentError, match="beyond: expected the distance from the median"):
        eh.compare_versions(old, old, chance=0.3)
    with pytest.raises(ArgumentError, match="b: expected a dimension named 'member'"):
        eh.compare_versions(old, old.isel(member=0), tolerance=2.0)
