"""The labelled front: shapes, laziness, units, flags, and properties of the fits."""

from __future__ import annotations

import pickle
from collections.abc import Callable

import cf_units
import dask
import dask.array
import numpy as np
import pytest
import xarray as xr
from hypothesis import given, settings
from hypothesis import strategies as st

from ensemble_horizon.errors import ArgumentError
from ensemble_horizon.growth import (
    LAWS,
    Reason,
    doubling_at,
    fit_curves,
    fit_growth,
    fitted_curve,
    fitted_time_to,
    growth_table,
)

Draw = Callable[..., np.ndarray]
Noisy = Callable[..., np.ndarray]
LEAD = np.arange(41) * 6.0


def labelled(values: np.ndarray, *dims: str, units: str = "m", lead_units: str = "hours"):
    axis = xr.DataArray(LEAD, dims="lead", attrs={"units": lead_units})
    return xr.DataArray(values, coords={"lead": axis}, dims=(*dims, "lead"), attrs={"units": units})


def test_one_curve_and_many_dimensions(noisy: Noisy) -> None:
    curves = noisy("logistic", 6)
    alone = fit_growth(labelled(curves[4]), law="logistic")
    assert alone.growth_rate.dims == ()
    block = labelled(curves.reshape(2, 3, -1), "start", "place").transpose("start", "lead", "place")
    fit = fit_growth(block.assign_coords(place=["a", "b", "c"]), law="logistic")
    assert fit.growth_rate.dims == ("start", "place")
    assert list(fit.place.values) == ["a", "b", "c"]
    plain = fit_curves(LEAD, curves, "logistic")
    np.testing.assert_array_equal(fit.growth_rate.values.ravel(), plain.parameters[:, 1])
    np.testing.assert_array_equal(fit.saturation_se.values.ravel(), plain.standard_errors[:, 2])
    assert float(fit.initial_error[1, 1]) == pytest.approx(float(alone.initial_error), rel=1e-12)


def test_variables_agree_with_each_other(law_name: str, noisy: Noisy) -> None:
    curves = labelled(noisy(law_name, 5), "site")
    fit = fit_growth(curves, law=law_name)
    law = LAWS[law_name]
    for name in ("initial_error", "growth_rate", "saturation", "source", "coefficient", "exponent"):
        known = name in law.parameters or (name == "growth_rate")
        assert bool(np.isnan(fit[name]).all()) != known
    modelled = fitted_curve(fit, curves.lead)
    residual = curves - modelled
    np.testing.assert_allclose((residual**2).sum("lead"), fit.rss, rtol=1e-9)
    about_mean = ((curves - curves.mean("lead")) ** 2).sum("lead")
    np.testing.assert_allclose(fit.r_squared, 1.0 - fit.rss / about_mean, rtol=1e-9)
    np.testing.assert_allclose(fit.rms_residual, np.sqrt((residual**2).mean("lead")), rtol=1e-9)
    doubled = modelled.isel(lead=0) * 2.0
    np.testing.assert_allclose(fitted_time_to(fit, doubled), fit.doubling_time_at_start, rtol=1e-6)
    np.testing.assert_allclose(doubling_at(fit, fit.initial_error), fit.doubling_time_at_start)
    assert (fit.points == 41).all()
    if law_name != "power":
        np.testing.assert_allclose(fit.doubling_time, np.log(2.0) / fit.growth_rate)


def test_auto_takes_the_law_of_least_criterion(noisy: Noisy) -> None:
    curves = labelled(np.concatenate([noisy(name, 10, 0.02) for name in LAWS]), "site")
    auto = fit_growth(curves)
    each = xr.concat([fit_growth(curves, law=name) for name in LAWS], "tried")
    best = each.aicc.argmin("tried")
    np.testing.assert_array_equal(auto.law, best + 1)
    xr.testing.assert_equal(auto.aicc, each.aicc.isel(tried=best))
    xr.testing.assert_equal(auto.initial_error, each.initial_error.isel(tried=best))


@pytest.mark.parametrize(
    ("units", "lead_units"), [("m", "hours"), ("m s-1", "days"), ("K", "1"), ("1", "6 hours")]
)
def test_units_are_spelt_as_udunits_reads_them(units: str, lead_units: str, noisy: Noisy) -> None:
    fit = fit_growth(labelled(noisy("logistic", 2), "site", units=units, lead_units=lead_units))
    curve, lead = cf_units.Unit(units), cf_units.Unit(lead_units)
    expected = {
        "growth_rate": lead**-1,
        "growth_rate_se": lead**-1,
        "doubling_time": lead,
        "initial_error": curve,
        "saturation_se": curve,
        "source": curve**2 * lead**-1,
        "rss": curve**2,
        "exponent": cf_units.Unit("1"),
    }
    for name, unit in expected.items():
        assert cf_units.Unit(fit[name].attrs["units"]) == unit, name
    assert all("long_name" in fit[name].attrs for name in fit.data_vars)


def test_hours_give_a_rate_per_hour_and_log_residuals_no_units(noisy: Noisy) -> None:
    curve = labelled(noisy("exponential", 1)[0])
    assert fit_growth(curve).growth_rate.units == "hour-1"
    assert fit_growth(curve, scale="log").rss.units == "1"
    assert fit_growth(curve).attrs["fitted_scale"] == "linear"
    bare = xr.DataArray(curve.values, coords={"lead": LEAD}, dims="lead")
    assert "units" not in fit_growth(bare).initial_error.attrs
    assert fit_growth(bare).growth_rate.units == "1"


def test_flags_follow_cf(noisy: Noisy) -> None:
    fit = fit_growth(labelled(noisy("power", 2), "site"))
    for name in ("law", "reason"):
        flag = fit[name]
        assert flag.dtype == np.int8 == flag.attrs["flag_values"].dtype
        assert len(flag.attrs["flag_meanings"].split()) == flag.attrs["flag_values"].size
    assert fit.law.attrs["flag_meanings"].split()[0] == "none"
    assert fit.points.dtype == np.int32


def test_curves_without_a_fit_say_why() -> None:
    growing = 0.1 * np.exp(0.01 * LEAD)
    four = np.where(np.arange(41) < 4, growing, np.nan)
    rows = np.stack([growing, four, np.nan * LEAD, np.ones(41), 0.0 * LEAD, growing[::-1]])
    fit = fit_growth(labelled(rows, "site"))
    assert list(fit.law) == [1, 0, 0, 0, 0, 1]
    few, constant = Reason.too_few_points, Reason.constant
    assert list(fit.reason) == [Reason.fitted, few, few, constant, constant, Reason.no_growth]
    assert list(fit.points) == [41, 4, 0, 41, 41, 41]
    assert np.isnan(fit.growth_rate[1:5]).all()
    assert float(fit.growth_rate[5]) == pytest.approx(-0.01)
    assert np.isinf(fit.doubling_time[5])
    short = fit_growth(labelled(rows, "site").isel(lead=slice(3)))
    assert (short.law == 0).all()
    assert (short.reason == few).all()
    assert (fit_growth(labelled(rows, "site"), law="logistic").reason[5]) == Reason.no_growth


def test_lazy_in_lazy_out(noisy: Noisy) -> None:
    values = noisy("logistic", 12).reshape(3, 4, -1)
    reads: list[tuple[int, ...]] = []

    def note(block: np.ndarray) -> np.ndarray:
        reads.append(block.shape)
        return block

    chunked = dask.array.from_array(values, chunks=(1, 2, 10)).map_blocks(
        note, dtype=float, meta=np.empty((0, 0, 0))
    )
    lazy = labelled(values, "y", "x").copy(data=chunked)
    fit = fit_growth(lazy)
    modelled = fitted_curve(fit, lazy.lead)
    assert not reads
    assert all(dask.is_dask_collection(fit[name].data) for name in fit.data_vars)
    assert dask.is_dask_collection(modelled.data)
    eager = fit_growth(labelled(values, "y", "x"))
    xr.testing.assert_allclose(fit.compute(scheduler="synchronous"), eager)
    # Six blocks in space, five in lead: each is read once for all variables.
    assert len(reads) == 30
    assert {name: fit[name].attrs.keys() for name in fit} == {
        name: eager[name].attrs.keys() for name in eager
    }


def test_kernel_runs_in_workers(noisy: Noisy) -> None:
    curves = noisy("logistic", 4)
    table = pickle.loads(pickle.dumps(growth_table))(curves, lead=LEAD)
    np.testing.assert_array_equal(table, growth_table(curves, lead=LEAD))


def test_netcdf_round_trip(tmp_path, noisy: Noisy) -> None:
    fit = fit_growth(labelled(noisy("power", 3), "site"))
    fit.to_netcdf(tmp_path / "fit.nc")
    with xr.open_dataset(tmp_path / "fit.nc", decode_timedelta=False) as again:
        xr.testing.assert_allclose(again.load(), fit)


def test_wrong_arguments_are_named(noisy: Noisy) -> None:
    curve = labelled(noisy("logistic", 1)[0])
    with pytest.raises(ArgumentError, match="curve: expected a dimension named 'lead'"):
        fit_growth(curve.rename(lead="time"))
    with pytest.raises(ArgumentError, match="law: expected one of auto, exponential"):
        fit_growth(curve, law="gompertz")
    with pytest.raises(ArgumentError, match="coordinate 'lead' of lead times as numbers"):
        fit_growth(curve.drop_vars("lead"))
    assert fit_growth(curve.rename(lead="time"), dim="time").growth_rate.ndim == 0


@settings(max_examples=25, deadline=None)
@given(
    factor=st.floats(1e-4, 1e5),
    law=st.sampled_from(["exponential", "logistic", "logistic-source", "power"]),
    scale=st.sampled_from(["linear", "log"]),
    seed=st.integers(0, 10_000),
)
def test_units_of_the_curve_do_not_matter(
    draw: Draw, factor: float, law: str, scale: str, seed: int
) -> None:
    clean = LAWS[law].value(draw(law, 3, seed), LEAD)
    curves = clean * np.exp(0.03 * np.random.default_rng(seed).standard_normal(clean.shape))
    one = fit_growth(labelled(curves, "site"), law=law, scale=scale)
    other = fit_growth(labelled(factor * curves, "site"), law=law, scale=scale)
    np.testing.assert_allclose(other.rss * (factor**-2 if scale == "linear" else 1.0), one.rss)
    for name in ("growth_rate", "exponent"):
        np.testing.assert_allclose(other[name], one[name], rtol=2e-3, atol=1e-4)
    for name in ("initial_error", "saturation"):
        np.testing.assert_allclose(other[name] / factor, one[name], rtol=2e-3, atol=1e-3)


@settings(max_examples=25, deadline=None)
@given(
    stretch=st.floats(1e-3, 1e3),
    law=st.sampled_from(["exponential", "logistic", "logistic-source"]),
    seed=st.integers(0, 10_000),
)
def test_units_of_lead_scale_the_rate(draw: Draw, stretch: float, law: str, seed: int) -> None:
    clean = LAWS[law].value(draw(law, 3, seed), LEAD)
    curves = clean * np.exp(0.03 * np.random.default_rng(seed).standard_normal(clean.shape))
    one = fit_growth(labelled(curves, "site"), law=law)
    other = fit_growth(labelled(curves, "site").assign_coords(lead=stretch * LEAD), law=law)
    np.testing.assert_allclose(other.rss, one.rss, rtol=1e-7)
    np.testing.assert_allclose(other.growth_rate * stretch, one.growth_rate, rtol=2e-3, atol=1e-4)
    np.testing.assert_allclose(other.initial_error, one.initial_error, rtol=2e-3, atol=1e-3)
