"""Analyses that do not fit the ensemble are refused, naming what was found."""

import numpy as np
import pytest
import xarray as xr

import ensemble_horizon as eh

STARTS = np.array(["2024-01-05", "2024-01-06", "2024-01-07"], dtype="datetime64[ns]")


@pytest.fixture
def ensemble():
    rng = np.random.default_rng(0)
    return xr.DataArray(
        rng.normal(size=(3, 2, 4, 3, 2)),
        dims=("start", "lead", "member", "latitude", "longitude"),
        coords={
            "start": STARTS,
            "lead": ("lead", [12.0, 24.0], {"units": "hours"}),
            "latitude": [10.0, 0.0, -10.0],
            "longitude": [0.0, 180.0],
        },
        attrs={"units": "K"},
    )


@pytest.fixture
def series(ensemble):
    times = STARTS[0] + np.arange(0, 73, 12) * np.timedelta64(1, "h")
    return xr.DataArray(
        np.arange(times.size * 6.0).reshape(times.size, 3, 2),
        dims=("valid", "latitude", "longitude"),
        coords={
            "valid": times, "latitude": ensemble.latitude, "longitude": ensemble.longitude
        },
        attrs={"units": "K"},
    )  # fmt: skip


def test_analyses_are_taken_at_start_plus_lead(ensemble, series):
    error = ensemble.mean("member").values - series.values[[[1, 2], [3, 4], [5, 6]]]
    found = eh.bias(ensemble, series, over_starts=False)
    np.testing.assert_allclose(found.transpose(*ensemble.isel(member=0).dims).values, error)
    lazy = eh.bias(ensemble.chunk({"start": 1}), series.chunk({"valid": 1}), over_starts=False)
    assert lazy.chunks is not None
    np.testing.assert_allclose(lazy.values, found.values)


def test_a_coordinate_of_valid_times_goes_before_start_plus_lead(ensemble, series):
    moved = ensemble.assign_coords(
        valid=(("start", "lead"), series.valid.values[[[6, 6], [5, 5], [0, 1]]])
    )
    found = eh.bias(moved, series, over_starts=False)
    error = ensemble.mean("member").values - series.values[[[6, 6], [5, 5], [0, 1]]]
    np.testing.assert_allclose(found.values, error)
    other = moved.isel(member=0, drop=True)
    with pytest.raises(eh.ArgumentError, match="the valid of the ensemble, such as"):
        eh.bias(moved, other.assign_coords(valid=other.valid + np.timedelta64(1, "h")))


def test_leads_count_in_their_own_units(ensemble, series):
    wanted = eh.bias(ensemble, series, over_starts=False)
    hours = ensemble.lead.values
    days = ensemble.assign_coords(lead=("lead", hours / 24, {"units": "days"}))
    periods = ensemble.assign_coords(lead=(hours * 3600).astype("timedelta64[s]"))
    for other in (days, periods):
        found = eh.bias(other, series, over_starts=False)
        np.testing.assert_array_equal(found.values, wanted.values)


def test_misaligned_times_are_named(ensemble, series):
    with pytest.raises(eh.ArgumentError, match=r"1 of them missing \(2024-01-06T12:00\)"):
        eh.crps(ensemble, series.drop_sel(valid=np.datetime64("2024-01-06T12")))
    gap = series.drop_sel(valid=np.datetime64("2024-01-06T12")).reindex(valid=series.valid)
    assert int(np.isnan(eh.crps(ensemble, gap)).sum()) == 6
    with pytest.raises(eh.ArgumentError, match="every valid time once"):
        eh.crps(ensemble, xr.concat([series, series[:1]], "valid"))
    moved = ensemble.isel(member=0, drop=True)
    moved = moved.assign_coords(start=STARTS + np.timedelta64(6, "h"))
    with pytest.raises(eh.ArgumentError, match="found 2024-01-05T06:00 there, and 3 of 3"):
        eh.rmse(ensemble, moved)
    with pytest.raises(eh.ArgumentError, match=r"expected 3 values.*found 2"):
        eh.rmse(ensemble, ensemble.isel(member=0, start=slice(2), drop=True))
    bare = ensemble.drop_vars("start")
    with pytest.raises(eh.ArgumentError, match="a coordinate valid, or start"):
        eh.rmse(bare, series)


def test_one_analysis_for_all_leads_is_no_analysis(ensemble):
    with pytest.raises(eh.ArgumentError, match="expected dimensions"):
        eh.rmse(ensemble, ensemble.isel(member=0, lead=0, drop=True))


def test_another_grid_and_other_units_are_refused(ensemble, series):
    with pytest.raises(eh.ArgumentError, match=r"latitude of the ensemble, such as 10.0.*11.0"):
        eh.crps(ensemble, series.assign_coords(latitude=[11.0, 1.0, -9.0]))
    with pytest.raises(eh.ArgumentError, match=r"3 values, as in the ensemble; found 2"):
        eh.crps(ensemble, series.isel(latitude=slice(2)))
    with pytest.raises(eh.ArgumentError, match=r"units 'K'.*'degC'"):
        eh.crps(ensemble, series.assign_attrs(units="degC"))
    with pytest.raises(eh.ArgumentError, match="expected dimensions"):
        eh.crps(ensemble, series.rename(latitude="row"))
    # The same grid in single precision and the other convention of longitude is the same grid.
    same = series.assign_coords(
        latitude=series.latitude.astype("f4"), longitude=[360.0, -180.0 + 1e-6]
    )
    np.testing.assert_array_equal(eh.crps(ensemble, same), eh.crps(ensemble, series))


def test_no_member_dimension_is_told(ensemble, series):
    with pytest.raises(eh.ArgumentError, match="dimension named 'member'"):
        eh.crps(ensemble.isel(member=0), series)
    with pytest.raises(eh.ArgumentError, match="one of the members"):
        eh.bias(ensemble, series, member=9)
    with pytest.raises(eh.ArgumentError, match="leave member= out"):
        eh.bias(ensemble.isel(member=0), series, member=0)
