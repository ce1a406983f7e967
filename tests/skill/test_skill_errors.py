"""Bias, root-mean-square error, skill over references, anomaly correlation."""

import numpy as np
import pytest
import xarray as xr

import ensemble_horizon as eh


@pytest.fixture
def case():
    rng = np.random.default_rng(4)
    coords = {"latitude": [60.0, 0.0, -30.0], "longitude": [0.0, 90.0, 180.0, 270.0]}
    dims = ("start", "lead", "latitude", "longitude")
    climatology = xr.DataArray(
        280 + rng.normal(0, 5, (3, 4)), dims=dims[2:], coords=coords, attrs={"units": "K"}
    )
    anomaly = xr.DataArray(rng.normal(0, 2, (6, 2, 3, 4)), dims=dims, coords=coords)
    noise = xr.DataArray(
        rng.normal(0, 1, (6, 2, 5, 3, 4)), dims=("start", "lead", "member", *dims[2:])
    )
    analysis = (climatology + anomaly).transpose(*dims)
    ensemble = (analysis + noise + 0.3).transpose("start", "lead", "member", ...)
    return ensemble, analysis, climatology


def test_errors_average_squares_with_area_weights(case):
    ensemble, analysis, _ = case
    weights = np.cos(np.radians([60.0, 0.0, -30.0]))[:, np.newaxis] * np.ones((3, 4))
    error = (ensemble.mean("member") - analysis).values
    for region, keep in (
        (eh.Region("all"), np.ones((3, 4))),
        (eh.Region("north", south=-5), [[1]] * 2 + [[0]]),
    ):
        w = weights * keep
        w = w / w.sum()
        np.testing.assert_allclose(
            eh.rmse(ensemble, analysis, region=region), np.sqrt((error**2 * w).sum((2, 3)).mean(0))
        )
        np.testing.assert_allclose(
            eh.bias(ensemble, analysis, region=region), (error * w).sum((2, 3)).mean(0)
        )
    control = (ensemble.isel(member=2) - analysis).values
    np.testing.assert_allclose(
        eh.rmse(ensemble, analysis, member=2).transpose("lead", ...), np.sqrt((control**2).mean(0))
    )
    with pytest.raises(eh.ArgumentError, match="at least one grid point inside"):
        eh.rmse(ensemble, analysis, region=eh.Region("pole", south=80))


def test_errors_of_single_precision_keep_their_digits():
    # 100000 Pa and errors of 0.01 Pa: the mean of members alone would lose them.
    members = np.full((50, 1000), 0.0078125, "f4") + np.float32(100000)
    found = eh.bias(
        xr.DataArray(members, dims=("member", "cell")),
        xr.DataArray(np.full(1000, 1e5, "f4"), dims="cell"),
    )
    np.testing.assert_allclose(found, 0.0078125, rtol=1e-6)


def test_anomaly_correlation_is_numpys_where_weights_are_even(case):
    ensemble, analysis, climatology = case
    flat = {"latitude": ("latitude", [0.0, 1e-9, 2e-9])}
    ensemble, analysis, climatology = (item.assign_coords(flat) for item in case)
    found = eh.anomaly_correlation(ensemble, analysis, climatology, centred=True)
    ours = (ensemble.mean("member") - climatology).transpose("start", "lead", ...).values
    theirs = (analysis - climatology).transpose("start", "lead", ...).values
    wanted = [
        [np.corrcoef(ours[s, t].ravel(), theirs[s, t].ravel())[0, 1] for t in range(2)]
        for s in range(6)
    ]
    np.testing.assert_allclose(found.transpose("start", "lead"), wanted, rtol=1e-6)
    plain = eh.anomaly_correlation(ensemble, analysis, climatology)
    wanted = (ours * theirs).sum((2, 3)) / np.sqrt((ours**2).sum((2, 3)) * (theirs**2).sum((2, 3)))
    np.testing.assert_allclose(plain.transpose("start", "lead"), wanted, rtol=1e-6)
    pooled = eh.anomaly_correlation(ensemble, analysis, climatology, over_starts=True)
    wanted = (ours * theirs).sum((0, 2, 3)) / np.sqrt(
        (ours**2).sum((0, 2, 3)) * (theirs**2).sum((0, 2, 3))
    )
    np.testing.assert_allclose(pooled, wanted, rtol=1e-6)


def test_anomaly_correlation_over_starts_without_space():
    rng = np.random.default_rng(2)
    analysis = xr.DataArray(rng.normal(size=(40, 3)), dims=("start", "lead"))
    forecast = analysis + rng.normal(size=(40, 3))
    found = eh.anomaly_correlation(forecast, analysis, xr.DataArray(0.0), centred=True)
    wanted = [np.corrcoef(forecast[:, t], analysis[:, t])[0, 1] for t in range(3)]
    np.testing.assert_allclose(found, wanted)
    with pytest.raises(eh.ArgumentError, match="dimension named 'start'"):
        eh.anomaly_correlation(forecast[0], analysis[0], xr.DataArray(0.0))


def test_constant_observations_have_no_correlation_but_errors(case):
    ensemble, analysis, climatology = case
    stuck = xr.zeros_like(analysis) + climatology
    found = eh.anomaly_correlation(ensemble, stuck, climatology, over_starts=True)
    assert np.isnan(found).all()
    assert np.isfinite(eh.rmse(ensemble, stuck)).all()
    above = xr.zeros_like(analysis) + climatology + 2.0
    centred = eh.anomaly_correlation(ensemble, above, climatology, centred=True)
    assert (np.abs(centred.fillna(0)) < 1).all()


def test_climatology_scores_its_gaussian_and_refuses_to_have_no_spread(case):
    _, analysis, climatology = case
    spread = xr.full_like(climatology, 2.0)
    found = eh.climatology_crps(analysis, climatology, spread)
    # A climatology that is right scores sigma / sqrt(pi) on average (Gneiting et al. 2005).
    rng = np.random.default_rng(0)
    many = xr.DataArray(rng.normal(0, 2, 100000), dims="start")
    one = eh.climatology_crps(many, xr.DataArray(0.0), xr.DataArray(2.0))
    assert abs(float(one.mean()) - 2 / np.sqrt(np.pi)) < 0.02
    assert found.dims == analysis.dims
    some = spread.where(spread.latitude != 0.0, 0.0)
    at_equator = eh.climatology_crps(analysis, climatology, some).sel(latitude=0.0)
    xr.testing.assert_allclose(
        at_equator, np.abs(analysis - climatology).transpose(*analysis.dims).sel(latitude=0.0)
    )
    for bad, told in ((0.0, "from 0 to 0"), (-1.0, "from -1 to -1"), (np.nan, "no value")):
        with pytest.raises(eh.ArgumentError, match=f"standard deviations.*{told}"):
            eh.climatology_crps(analysis, climatology, spread * 0 + bad)


def test_persistence_is_the_analysis_at_the_start():
    times = np.datetime64("2024-01-05", "ns") + np.arange(8) * np.timedelta64(6, "h")
    series = xr.DataArray(np.arange(8.0) ** 2, dims="valid", coords={"valid": times})
    starts = times[[0, 4]]
    forecast = xr.DataArray(
        np.zeros((2, 3)), dims=("start", "lead"),
        coords={"start": starts, "lead": ("lead", [0.0, 6.0, 12.0], {"units": "hours"})},
    )  # fmt: skip
    still = eh.persistence(forecast, series)
    assert still.values.tolist() == [0.0, 16.0]
    error = eh.bias(still.broadcast_like(forecast).assign_coords(lead=forecast.lead), series)
    np.testing.assert_allclose(error, [0.0, (-1 + 16 - 25) / 2, (-4 + 16 - 36) / 2])
    with pytest.raises(eh.ArgumentError, match="missing"):
        eh.persistence(forecast, series[1:])
    with pytest.raises(eh.ArgumentError, match="coordinate start"):
        eh.persistence(forecast.drop_vars("start"), series)


def test_skill_score_compares_the_same_points():
    score = xr.DataArray([[1.0, 2.0], [np.nan, 4.0]], dims=("start", "lead"))
    reference = xr.DataArray([[2.0, np.nan], [100.0, 8.0]], dims=("start", "lead"))
    assert eh.skill_score(score, reference).values.tolist() == [0.5, 0.5]
    assert np.isnan(eh.skill_score(score * 0, reference * 0)).all()
    lasting = eh.skill_score(score, xr.DataArray(4.0))
    assert lasting.values.tolist() == [0.75, 0.25]
