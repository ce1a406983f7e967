"""The reduction of a block gives what the labelled functions give of the whole."""

import numpy as np
import pytest
import scipy.stats
import xarray as xr

import ensemble_horizon as eh
from ensemble_horizon.skill.quantities import QUANTITIES
from ensemble_horizon.skill.reduction import ScoreReduction, empty_scores, reduce_scores
from ensemble_horizon.spread.places import region_weights
from ensemble_horizon.spread.reduction import RegionWeights

REGIONS = {"all": eh.Region("all"), "tropics": eh.Region("tropics", south=-20, north=20)}
DIMS = ("member", "lead", "latitude", "longitude")


@pytest.fixture
def block():
    """Members (6, 3, 90, 120) in single precision, analyses, climatology, persistence."""
    rng = np.random.default_rng(0)
    coords = {"latitude": np.linspace(89, -89, 90), "longitude": 3.0 * np.arange(120)}
    shape = (90, 120)
    mean = 280 + rng.normal(0, 10, shape)
    deviation = rng.uniform(1, 4, shape)
    analysis = mean + deviation * rng.normal(size=(3, *shape))
    members = analysis + 0.2 + rng.normal(size=(6, 3, *shape))
    still = mean + deviation * rng.normal(size=shape)
    arrays = (members, analysis, mean, deviation, still)
    return [
        xr.DataArray(item.astype("f4"), dims=DIMS[4 - item.ndim :], coords=coords)
        for item in arrays
    ]


def weights_of(field, sites=()):
    grid = np.meshgrid(field.latitude, field.longitude, indexing="ij")
    latitude, longitude = (item.ravel() for item in grid)
    for name, region in REGIONS.items():
        whole = region_weights(region, latitude, longitude)
        index = np.flatnonzero(whole > 0)
        yield RegionWeights(name, index, whole[index])
    for site in sites:
        yield RegionWeights(f"site {site}", np.array([site]), np.ones(1))


def reduced(block, fields=(), **changes):
    members, analysis, mean, deviation, still = (item.values for item in block)
    size = analysis[0].size
    given = {"control": 2, "mean": mean.ravel(), "deviation": deviation.ravel(), **changes}
    reduction = ScoreReduction(size, tuple(weights_of(block[1], (0, 5000))), fields=fields, **given)
    flat = members.reshape(6, 3, size), analysis.reshape(3, size)
    return reduce_scores(*flat, reduction, None, still.ravel()), reduction, flat


def wanted_means(block, region):
    members, analysis, mean, deviation, still = (item.astype(float) for item in block)
    every = {"over_starts": False, "region": region}
    pair = eh.spread_and_error(members, analysis, region=region)
    outside = eh.outside_share(members, analysis, **every)
    anomaly = eh.anomaly_products(members, analysis, mean, region=region)
    control = eh.anomaly_products(members, analysis, mean, member=2, region=region)
    constant = still.broadcast_like(analysis)

    def average(field):
        return eh.bias(field, xr.zeros_like(field), **every)

    return {
        "error": eh.bias(members, analysis, **every),
        "squared_error": pair.squared_error,
        "variance": pair.expected_squared_error * 6 / 7,
        "expected_squared_error": pair.expected_squared_error,
        "crps": average(eh.crps(members, analysis)),
        "outside": outside.outside,
        "outside_expected": outside.expected,
        "control_error": eh.bias(members, analysis, member=2, **every),
        "control_squared_error": eh.rmse(members, analysis, member=2, **every) ** 2,
        "control_crps": average(np.abs(members.isel(member=2) - analysis)),
        "climatology_crps": average(eh.climatology_crps(analysis, mean, deviation)),
        "anomaly": average((analysis - mean).transpose(*analysis.dims)),
        "anomaly_squared": anomaly.analysis_squared,
        "product": anomaly["product"],
        "forecast_squared": anomaly.forecast_squared,
        "control_product": control["product"],
        "control_forecast_squared": control.forecast_squared,
        "persistence_squared_error": eh.rmse(constant, analysis, **every) ** 2,
        "persistence_crps": average(np.abs(constant - analysis)),
    }


def test_sums_are_those_of_the_labelled_functions(block):
    sums, _, _ = reduced(block)
    for number, region in enumerate(REGIONS.values()):
        wanted = wanted_means(block, region)
        assert set(wanted) == set(QUANTITIES)
        for name, item in wanted.items():
            np.testing.assert_allclose(
                sums.mean(name)[:, number], item, rtol=2e-4, atol=2e-5, err_msg=name
            )
        counts = eh.rank_counts(block[0], block[1], region=region)
        share = counts / counts.sum("rank")
        np.testing.assert_allclose(
            sums.ranks[:, number], share.transpose("lead", "rank"), atol=1e-9
        )


def test_a_site_is_a_region_of_one_point(block):
    sums, _, _ = reduced(block)
    members, analysis = block[0].astype(float), block[1].astype(float)
    where = {"latitude": 5000 // 120, "longitude": 5000 % 120}
    wanted = eh.crps(members, analysis).isel(where)
    np.testing.assert_allclose(sums.mean("crps")[:, 3], wanted, rtol=1e-4)
    assert sums.ranks[:, 3].sum(axis=1).tolist() == [1.0] * 3


def test_windows_of_leads_and_points_add_up(block):
    whole, reduction, (members, analysis) = reduced(block, fields=("error", "crps"))
    still = block[4].values.ravel()
    joined = empty_scores(reduction, 6, 3, reduction.size)
    for leads in (slice(0, 2), slice(2, 3)):
        for points in (np.arange(0, 10800, 2), np.arange(1, 10800, 2)):
            part = reduce_scores(
                members[:, leads][:, :, points], analysis[leads][:, points],
                reduction, points, still[points],
            )  # fmt: skip
            joined.add(part, leads, points)
    np.testing.assert_allclose(joined.sums, whole.sums, rtol=1e-6, atol=1e-9)
    np.testing.assert_allclose(joined.weights, whole.weights)
    np.testing.assert_allclose(joined.ranks, whole.ranks, atol=1e-12)
    for name, field in whole.fields.items():
        assert field.dtype == np.float32
        np.testing.assert_allclose(joined.fields[name], field, rtol=1e-6)


def test_gaps_anywhere_leave_the_point_out_of_every_score(block):
    rng = np.random.default_rng(1)
    holes = [item.copy() for item in block]
    for item, share in zip(holes, (0.02, 0.1, 0.1, 0.0, 0.1), strict=True):
        item.values[rng.random(item.shape) < share] = np.nan
    sums, _, _ = reduced(holes, fields=("squared_error",))
    # A member's gap does not take the point, but for the control's.
    members, analysis, mean, _, still = holes
    good = (
        (members.notnull().sum("member") > 1)
        & members.isel(member=2).notnull()
        & analysis.notnull() & mean.notnull() & still.notnull()
    ).transpose("lead", ...)  # fmt: skip
    kept = [members, analysis.where(good), holes[2], holes[3], still]
    assert np.isfinite(sums.mean("persistence_crps")).all(axis=0)[:2].all()
    wanted = (
        eh.rmse(
            kept[0].astype(float), kept[1].astype(float), over_starts=False, region=REGIONS["all"]
        )
        ** 2
    )
    np.testing.assert_allclose(sums.mean("squared_error")[:, 0], wanted, rtol=1e-4)
    scores = eh.crps(kept[0].astype(float), kept[1].astype(float))
    weights = np.cos(np.radians(scores.latitude))
    wanted = scores.weighted(weights).mean(("latitude", "longitude"))
    np.testing.assert_allclose(sums.mean("crps")[:, 0], wanted, rtol=1e-4)
    field = sums.fields["squared_error"].reshape(good.shape)
    np.testing.assert_array_equal(np.isfinite(field), good)
    np.testing.assert_allclose(sums.ranks.sum(axis=-1), sums.weights[0])


def test_absent_parts_are_missing_and_take_nothing_with_them(block):
    bare = [item.copy() for item in block]
    bare[0][2, 1] = np.nan  # the control has no value at the second lead
    bare[4][:] = np.nan
    sums, _, _ = reduced(bare, mean=None, deviation=None)
    assert np.isnan(sums.mean("climatology_crps")).all()
    assert np.isnan(sums.mean("persistence_crps")).all()
    assert np.isnan(sums.mean("control_crps")[1]).all()
    assert np.isfinite(sums.mean("control_crps")[[0, 2]]).all()
    assert np.isfinite(sums.mean("crps")).all()
    np.testing.assert_allclose(
        sums.mean("outside_expected")[:, 0], [2 / 7, 2 / 6, 2 / 7], rtol=1e-6
    )
    no_analysis = [item.copy() for item in block]
    no_analysis[1][0] = np.nan
    sums, _, _ = reduced(no_analysis)
    assert np.isnan(sums.mean("crps")[0]).all()
    assert sums.ranks[0].sum() == 0
    one = [item.copy() for item in block]
    one[0][1:] = np.nan
    assert np.isnan(reduced(one, control=None)[0].mean("crps")).all()


def test_a_reference_present_in_part_of_the_windows_is_not_averaged(block):
    whole, reduction, (members, analysis) = reduced(block)
    joined = empty_scores(reduction, 6, 3, reduction.size)
    halves = np.array_split(np.arange(reduction.size), 2)
    for points, still in zip(halves, (block[4].values.ravel()[halves[0]], None), strict=True):
        part = reduce_scores(members[:, :, points], analysis[:, points], reduction, points, still)
        joined.add(part, slice(None), points)
    assert np.isnan(joined.mean("persistence_crps")[:, :2]).all()
    np.testing.assert_allclose(joined.mean("crps"), whole.mean("crps"), rtol=1e-6)


def test_ties_are_broken_anew_at_every_start():
    # Two in three values are zero, in truth as in members: a reliable forecast of dry days.
    random = np.random.default_rng(3)
    drawn = random.normal(size=(10, 400)) * (random.random((10, 400)) > 0.67)
    one = ScoreReduction(1, (RegionWeights("site", np.zeros(1, dtype=int), np.ones(1)),))
    counts = np.zeros(10)
    for start in range(400):
        values, truth = drawn[:9, start].reshape(9, 1, 1), drawn[9, start].reshape(1, 1)
        counts += reduce_scores(values, truth, one, moment=(start, 0)).ranks[0, 0]
    # Pearson's chi-square with 9 degrees of freedom: 27.9 at the 0.1 percent level (scipy).
    assert scipy.stats.chisquare(counts).pvalue > 1e-3
    same = [reduce_scores(values, truth, one, moment=(7, 0)).ranks for _ in range(2)]
    assert np.array_equal(*same)
