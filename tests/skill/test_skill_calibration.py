"""Calibration of spread against error, on ensembles with known truth."""

import numpy as np
import pytest
import xarray as xr

import ensemble_horizon as eh
from ensemble_horizon.skill.factor import calibrated_noise, spread_factor
from ensemble_horizon.skill.smoothing import lead_smoother, neighbour_means
from ensemble_horizon.spread.sampling import LeadNoise

LEAD = 12.0 * np.arange(1, 11)
FACTOR = 1.6 - 0.5 * (1 - np.exp(-LEAD / 72))


def narrow(rng, starts, members, cells, correlation=0.0, memory=0.9, length=5.0):
    """Truth and members (S, L, [M,] C) whose spread is too small by FACTOR."""
    leads = memory ** np.abs(np.subtract.outer(np.arange(LEAD.size), np.arange(LEAD.size)))
    apart = np.abs(np.subtract.outer(np.arange(cells), np.arange(cells)))
    white = rng.standard_normal((starts, members + 1, LEAD.size, cells))
    for start in range(1, starts):
        white[start] = correlation * white[start - 1] + np.sqrt(1 - correlation**2) * white[start]
    drawn = np.einsum("kl,smlc->skmc", np.linalg.cholesky(leads), white)
    drawn = drawn @ np.linalg.cholesky(np.exp(-apart / length)).T
    # The members' mean errs by no more than truth does: E[e^2] = F^2 (M + 1)/M E[s2].
    truth, rest = drawn[:, :, 0], drawn[:, :, 1:]
    middle = rest.mean(axis=2, keepdims=True)
    return truth, middle + (rest - middle) / FACTOR[:, np.newaxis, np.newaxis]


def labelled(truth, members):
    cells = truth.shape[-1]
    coords = {
        "lead": ("lead", LEAD, {"units": "hours"}),
        "latitude": ("cell", np.zeros(cells)),
        "longitude": ("cell", np.arange(float(cells))),
    }
    return (
        xr.DataArray(members, dims=("start", "lead", "member", "cell"), coords=coords),
        xr.DataArray(truth, dims=("start", "lead", "cell"), coords=coords),
    )


def test_an_under_dispersive_ensemble_is_corrected():
    rng = np.random.default_rng(0)
    ensemble, truth = labelled(*narrow(rng, 200, 10, 20, 0.5))
    whole = eh.Region("all")
    pair = eh.spread_and_error(ensemble, truth, region=whole)
    found = eh.calibration_factor(pair)
    assert (np.abs(found.factor / FACTOR - 1) < 0.1).all()
    spread = eh.area_curve(eh.spread(ensemble), over_starts=True)
    calibrated = eh.apply_calibration(spread, found)
    assert calibrated.dims == spread.dims
    ratio = np.sqrt(11 / 10) * calibrated / eh.rmse(ensemble, truth, region=whole)
    inside = (ratio >= found.low / found.factor) & (ratio <= found.high / found.factor)
    assert inside.all()
    assert (eh.spread_error_ratio(ensemble, truth, region=whole) < 0.95).all()


def test_uncertainty_adds_to_the_sampling_noise_of_members():
    found = spread_factor(
        LEAD, np.ones((40, 10, 1)), np.random.default_rng(1).gamma(2, 0.5, (40, 10, 1))
    )
    noise = LeadNoise(np.full(10, 19.0), np.eye(10), inflation=1.1)
    both = calibrated_noise(noise, found.log_variance[:, 0], found.correlation)
    np.testing.assert_allclose(2 / both.dof, 2 / 19 + found.log_variance[:, 0])
    np.testing.assert_allclose(np.diag(both.correlation), 1)
    assert both.inflation == 1.1
    assert np.all(np.linalg.eigvalsh(both.correlation) > 0)
    # Independent leads whose weights the smoothing shares are no longer independent.
    assert found.correlation[0, 1] > 0.3
    assert abs(found.correlation[0, 9]) < 0.3


def test_too_few_starts_are_refused_and_the_number_needed_is_told():
    rng = np.random.default_rng(3)
    ensemble, truth = labelled(*narrow(rng, 12, 10, 1))
    pair = eh.spread_and_error(ensemble, truth).isel(cell=0)
    with pytest.raises(eh.ArgumentError, match=r"found 12 starts.*about \d+ are needed") as caught:
        eh.calibration_factor(pair, wanted=0.05)
    told = int(caught.value.found.split("about ")[1].split()[0])
    # A squared Gaussian error has a relative variance of 2: n = 2 / (2 * 0.05)^2 = 200 at one lead,
    # less by the smoothing, more by the noise of twelve starts.
    assert 50 < told < 500
    with pytest.raises(eh.ArgumentError, match="at least 10 starts"):
        eh.calibration_factor(pair.isel(start=slice(5)))
    with pytest.raises(eh.ArgumentError, match="several starts"):
        eh.calibration_factor(pair.isel(start=[0]))
    accepted = eh.calibration_factor(pair, wanted=0.9)
    assert np.isfinite(accepted.factor).all()


def test_bad_input_is_refused():
    rng = np.random.default_rng(3)
    ensemble, truth = labelled(*narrow(rng, 20, 5, 30))
    pair = eh.spread_and_error(ensemble, truth, region=eh.Region("all"))
    with pytest.raises(eh.ArgumentError, match="dataset that spread_and_error gives"):
        eh.calibration_factor(pair[["squared_error"]])
    with pytest.raises(eh.ArgumentError, match="dimension named 'lead'"):
        eh.calibration_factor(pair.isel(lead=0))
    with pytest.raises(eh.ArgumentError, match="a lead coordinate"):
        eh.calibration_factor(pair.drop_vars("lead"))
    with pytest.raises(eh.ArgumentError, match="share from 0 to 1"):
        eh.calibration_factor(pair, span=2)
    with pytest.raises(eh.ArgumentError, match="above zero at some lead"):
        eh.calibration_factor(pair * 0)
    with pytest.raises(eh.ArgumentError, match="latitude and longitude"):
        eh.calibration_factor(pair, radii_km=[100])
    found = eh.calibration_factor(pair, wanted=0.5)
    spread = eh.area_curve(eh.spread(ensemble), over_starts=True)
    with pytest.raises(eh.ArgumentError, match="leads within those of the calibration"):
        eh.apply_calibration(spread.assign_coords(lead=LEAD + 24), found)
    with pytest.raises(eh.ArgumentError, match="with factor"):
        eh.apply_calibration(spread, found.drop_vars("factor"))
    two = xr.concat([found, found], "place").assign_coords(place=["a", "b"])
    with pytest.raises(eh.ArgumentError, match="the places of the calibration"):
        eh.apply_calibration(spread.expand_dims(place=["a", "c"]), two)


def test_places_without_enough_starts_stay_uncalibrated():
    rng = np.random.default_rng(5)
    squared = np.stack([rng.gamma(50, 1 / 50, (30, 10)), rng.gamma(0.5, 2, (30, 10))], -1)
    dims = ("start", "lead", "place")
    pair = xr.Dataset(
        {
            "expected_squared_error": (dims, np.ones((30, 10, 2))),
            "squared_error": (dims, squared),
        },
        coords={"lead": LEAD, "place": ["region", "site"]},
    )
    found = eh.calibration_factor(pair, wanted=0.06)
    assert np.isfinite(found.factor.sel(place="region")).all()
    assert np.isnan(found.factor.sel(place="site")).all()
    assert found.starts_needed.sel(place="site") > 30 >= found.starts_needed.sel(place="region")
    spread = xr.ones_like(found.factor)
    assert np.isnan(eh.apply_calibration(spread, found).sel(place="site")).all()


def test_missing_starts_and_leads():
    rng = np.random.default_rng(6)
    squared = rng.gamma(20, 1 / 20, (40, 10, 2))
    squared[:20, 8:, 0] = np.nan
    squared[5] = np.nan
    squared[:, 4, 1] = np.nan
    found = spread_factor(LEAD, np.ones((40, 10, 2)), squared)
    assert found.starts[:, 0].tolist() == [39] * 8 + [20] * 2
    assert np.isnan(found.log_square[4, 1])
    assert np.isfinite(np.delete(found.log_square, 4, axis=0)).all()
    assert found.log_variance[9, 0] > found.log_variance[9, 1]


def test_neighbours_lend_a_grid_what_its_points_lack():
    rng = np.random.default_rng(7)
    latitude, longitude = np.arange(-4.0, 5.0), np.arange(0.0, 10.0)
    dims = ("start", "lead", "latitude", "longitude")
    pair = xr.Dataset(
        {
            "expected_squared_error": (dims, np.ones((40, 4, 9, 10))),
            "squared_error": (dims, 4 * rng.gamma(0.5, 2, (40, 4, 9, 10))),
        },
        coords={"lead": LEAD[:4], "latitude": latitude, "longitude": longitude},
    )
    with pytest.raises(eh.ArgumentError, match="are needed"):
        eh.calibration_factor(pair, wanted=0.03)
    found = eh.calibration_factor(pair, wanted=0.03, radii_km=[100.0, 300.0])
    assert set(np.unique(found.radius_km)) <= {100.0, 300.0}
    assert np.isfinite(found.factor).mean() > 0.9
    assert (np.abs(found.factor / 2 - 1) < 0.15).all()


def test_neighbour_means_and_smoothing_by_hand():
    # A third of the way round the globe is beyond the neighbourhood; area weighs in.
    fields = np.array([[1.0, 3.0, 100.0], [np.nan, 3.0, 100.0]])
    place = np.zeros(3), np.array([0.0, 1e-6, 120.0])
    found = neighbour_means(fields, *place, np.array([1.0, 3.0, 1.0]), 500.0)
    np.testing.assert_allclose(found, [[2.5, 2.5, 100.0], [np.nan, 3.0, 100.0]])
    lead = np.array([0.0, 1.0, 2.0, 4.0, 8.0, 9.0, 12.0])
    smoother = lead_smoother(lead, np.array([1, 1, 0, 1, 2, 1, 1]), 0.4)
    assert np.isnan(smoother[2]).all()
    keep = [0, 1, 3, 4, 5, 6]
    np.testing.assert_allclose((smoother @ (5 - lead))[keep], (5 - lead)[keep])
    # statsmodels' lowess is the same line where every lead weighs alike.
    from statsmodels.nonparametric.smoothers_lowess import lowess

    rng = np.random.default_rng(0)
    lead, values = np.arange(30.0), rng.normal(size=30)
    ours = lead_smoother(lead, np.ones(30), 0.3) @ values
    # Ours reaches to the lead just beyond the nearest, theirs to the last of the nearest.
    theirs = lowess(values, lead, frac=(9 + 1) / 30, it=0, return_sorted=False)
    np.testing.assert_allclose(ours, theirs, atol=1e-6)


@pytest.mark.slow
@pytest.mark.parametrize(
    ("starts", "cells", "correlation"),
    [(30, 1, 0.0), (30, 1, 0.5), (60, 1, 0.5), (30, 30, 0.5), (60, 30, 0.7), (120, 1, 0.5)],
)
def test_ninety_percent_intervals_of_the_factor_cover_as_often_as_they_say(
    starts, cells, correlation
):
    rng = np.random.default_rng([starts, cells, int(10 * correlation)])
    cases, members = 1000, 10
    expected = np.empty((starts, LEAD.size, cases))
    squared = np.empty_like(expected)
    for case in range(cases):
        truth, ensemble = narrow(rng, starts, members, cells, correlation)
        error = (ensemble.mean(axis=2) - truth) ** 2
        variance = ensemble.var(axis=2, ddof=1) * (members + 1) / members
        expected[..., case], squared[..., case] = variance.mean(axis=-1), error.mean(axis=-1)
    found = spread_factor(LEAD, expected, squared)
    truth = FACTOR[:, np.newaxis]
    share = np.mean((found.low <= truth) & (found.high >= truth))
    assert 0.87 <= share <= 0.93, share
    # The variance of ln(f^2) is told without bias, near enough.
    told = np.mean(found.log_variance, axis=1) / np.var(found.log_square, axis=1)
    assert np.all((told > 0.75) & (told < 1.35)), told


def test_factors_of_cells_are_brought_to_a_grid():
    # A factor that grows eastward and southward, across the date line, and one cell without.
    latitude, longitude = np.arange(-40.0, 41, 10), np.arange(0.0, 360, 10)
    cells = xr.DataArray(
        np.zeros((2, 9, 36)),
        dims=("lead", "latitude", "longitude"),
        coords={"lead": [12.0, 24.0], "latitude": latitude, "longitude": longitude},
    )
    factor = np.exp(cells + np.cos(np.radians(cells.longitude)) - cells.latitude / 100)
    held = xr.Dataset(
        {
            "factor": factor.where((cells.latitude != 0) | (cells.longitude != 90)),
            "log_variance": cells + 0.01,
        }
    )
    like = xr.DataArray(
        np.ones((2, 33, 72)),
        dims=("lead", "latitude", "longitude"),
        coords={
            "lead": cells.lead,
            "latitude": np.linspace(80, -80, 33),
            "longitude": np.arange(-180.0, 180, 5),
        },
    )
    found = eh.calibration_on_grid(held, like)
    assert found.factor.dims == like.dims
    inside = np.abs(like.latitude) <= 40
    smooth = np.exp(np.cos(np.radians(like.longitude)) - like.latitude / 100)
    away = np.log(found.factor / smooth).where(inside)
    assert float(np.abs(away).max()) < 0.12
    assert np.isfinite(found.factor.sel(latitude=0, longitude=90)).all()
    exact = found.factor.sel(latitude=[-40.0, 10.0], longitude=[-180.0, -10.0, 50.0])
    wanted = factor.sel(latitude=[-40.0, 10.0], longitude=[180.0, 350.0, 50.0])
    np.testing.assert_allclose(exact.transpose(*wanted.dims), wanted, rtol=1e-5)
    np.testing.assert_allclose(found.log_variance.where(inside, 0.01), 0.01)
    assert np.isnan(found.factor.sel(latitude=80)).all()
    calibrated = eh.apply_calibration(like, found)
    np.testing.assert_allclose(calibrated, found.factor)
    with pytest.raises(eh.ArgumentError, match="latitude and longitude"):
        eh.calibration_on_grid(held, like.drop_vars("latitude"))
    with pytest.raises(eh.ArgumentError, match="calibration_on_grid"):
        eh.apply_calibration(like, held)
