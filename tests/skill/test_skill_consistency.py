"""Ratio of spread and error, ranks and their flatness, on ensembles with known truth."""

import numpy as np
import pytest
import xarray as xr
from scipy import stats

import ensemble_horizon as eh
from ensemble_horizon.skill.flatness import flatness


def consistent(rng, starts, members, cells=1, correlation=0.0, length=0.0, narrow=1.0):
    """Truth and members drawn alike (S, C), (S, M, C); AR(1) over starts, correlated in space."""
    white = rng.standard_normal((starts, members + 1, cells))
    for start in range(1, starts):
        white[start] = correlation * white[start - 1] + np.sqrt(1 - correlation**2) * white[start]
    if length:
        apart = np.abs(np.subtract.outer(np.arange(cells), np.arange(cells)))
        white = white @ np.linalg.cholesky(np.exp(-apart / length)).T
    return white[:, 0], narrow * white[:, 1:]


def labelled(truth, members):
    cells = truth.shape[-1]
    coords = {
        "latitude": ("cell", np.zeros(cells)),
        "longitude": ("cell", np.arange(float(cells))),
    }
    return (
        xr.DataArray(members, dims=("start", "member", "cell"), coords=coords),
        xr.DataArray(truth, dims=("start", "cell"), coords=coords),
    )


@pytest.mark.parametrize("members", [2, 5, 20])
def test_a_consistent_ensemble_has_ratio_one_and_flat_ranks(members):
    rng = np.random.default_rng(members)
    ensemble, truth = labelled(*consistent(rng, 4000, members, 10))
    ratio = eh.spread_error_ratio(ensemble, truth, region=eh.Region("all"))
    assert abs(float(ratio) - 1) < 0.02
    counts = eh.rank_counts(ensemble, truth)
    assert counts.dims == ("start", "rank")
    assert counts.sizes["rank"] == members + 1
    np.testing.assert_allclose(counts.sum("rank"), 10)
    # Independent draws: Pearson's chi-square holds, from scipy.
    assert stats.chisquare(counts.sum("start")).pvalue > 0.001
    found = eh.rank_flatness(counts)
    np.testing.assert_allclose(found.chi_square, stats.chisquare(counts.sum("start")).statistic)
    # Its variance rests on at most 24 cosines of each of M patterns.
    assert abs(float(found.design_effect) - 1) < 3 * np.sqrt(2 / (24 * members))
    assert float(found.p_value) > 0.001
    share = eh.outside_share(ensemble, truth, region=eh.Region("all"))
    np.testing.assert_allclose(share.expected, 2 / (members + 1))
    assert abs(float(share.outside - share.expected)) < 0.01


def test_a_narrow_ensemble_is_found_out():
    rng = np.random.default_rng(1)
    ensemble, truth = labelled(*consistent(rng, 400, 20, 10, 0.5, 3.0, narrow=0.5))
    # Error of the mean: truth 1 + mean 0.25/20; spread 0.25.
    wanted = np.sqrt(21 / 20 * 0.25 / (1 + 0.25 / 20))
    assert (
        abs(float(eh.spread_error_ratio(ensemble, truth, region=eh.Region("all"))) - wanted) < 0.03
    )
    assert float(eh.rank_flatness(eh.rank_counts(ensemble, truth)).p_value) < 1e-4
    share = eh.outside_share(ensemble, truth, region=eh.Region("all"))
    assert float(share.outside) > 2 * float(share.expected)


def test_variances_are_averaged_not_standard_deviations():
    ensemble = xr.DataArray([[0.0, 2.0], [0.0, 20.0]], dims=("start", "member"))
    truth = xr.DataArray([2.0, 20.0], dims="start")
    found = eh.spread_error_ratio(ensemble, truth)
    np.testing.assert_allclose(found, np.sqrt(1.5 * (2 + 200) / (1 + 100)))


def test_spread_and_error_rest_on_the_same_points():
    members = np.array([[[1.0, 3.0, np.nan]], [[3.0, np.nan, np.nan]]]).transpose(1, 0, 2)
    ensemble, truth = labelled(np.array([[1.0, 5.0, 7.0]]), members)
    pair = eh.spread_and_error(ensemble, truth, region=eh.Region("all"))
    assert pair.expected_squared_error.values.tolist() == [3.0]
    assert pair.squared_error.values.tolist() == [1.0]
    with pytest.raises(eh.ArgumentError, match="at least two members"):
        eh.spread_error_ratio(ensemble.isel(member=[0]), truth)


def test_no_error_at_all_is_an_infinite_ratio_and_nothing_at_all_none():
    ensemble = xr.DataArray([[0.0, 2.0], [1.0, 1.0]], dims=("lead", "member"))
    found = eh.spread_error_ratio(ensemble, xr.DataArray([1.0, 1.0], dims="lead"))
    assert np.isinf(found[0])
    assert np.isnan(found[1])


def test_ties_are_broken_at_random_and_by_the_seed():
    ensemble = xr.DataArray(np.zeros((3000, 4)), dims=("start", "member"))
    truth = xr.DataArray(np.zeros(3000), dims="start")
    counts = eh.rank_counts(ensemble, truth, seed=1)
    assert stats.chisquare(counts.sum("start")).pvalue > 0.001
    np.testing.assert_array_equal(counts, eh.rank_counts(ensemble, truth, seed=1))
    assert (counts != eh.rank_counts(ensemble, truth, seed=2)).any()
    share = eh.outside_share(ensemble, truth)
    np.testing.assert_allclose(share.outside, 0.4)


def test_missing_members_keep_flat_ranks_flat():
    rng = np.random.default_rng(5)
    truth, members = consistent(rng, 6000, 6)
    members[rng.random(members.shape) < 0.3] = np.nan
    ensemble, truth = labelled(truth, members)
    counts = eh.rank_counts(ensemble, truth).sum("start")
    assert stats.chisquare(counts).pvalue > 0.001
    share = eh.outside_share(ensemble, truth, region=eh.Region("all"))
    assert abs(float(share.outside - share.expected)) < 0.02


def test_counts_weigh_by_area_and_do_not_hang_on_chunks():
    rng = np.random.default_rng(0)
    members = np.round(rng.normal(size=(5, 2, 4, 3, 6)))
    ensemble = xr.DataArray(
        members,
        dims=("start", "lead", "member", "latitude", "longitude"),
        coords={"latitude": [60.0, 0.0, -60.0], "longitude": 60.0 * np.arange(6)},
    )
    truth = ensemble.isel(member=0, drop=True).round() * 0
    counts = eh.rank_counts(ensemble, truth)
    np.testing.assert_allclose(counts.sum("rank"), 18)
    lazy = eh.rank_counts(
        ensemble.chunk({"start": 2, "latitude": 1, "member": 2}), truth.chunk({"lead": 1})
    )
    assert lazy.chunks is not None
    np.testing.assert_array_equal(lazy.transpose(*counts.dims), counts)
    low = truth.where(truth.latitude != 0, -99.0).where(truth.latitude == 0, 99.0)
    counts = eh.rank_counts(ensemble, low)
    np.testing.assert_allclose(counts.isel(rank=[0, -1]).mean(("start", "lead")), [9.0, 9.0])


def test_flatness_tells_why_there_is_no_p_value():
    rng = np.random.default_rng(0)
    ensemble, truth = labelled(*consistent(rng, 6, 5, 4))
    found = eh.rank_flatness(eh.rank_counts(ensemble, truth))
    assert np.isnan(found.p_value)
    assert found.interval_reason.attrs["flag_meanings"].split()[int(found.interval_reason)] == (
        "few_starts"
    )
    with pytest.raises(eh.ArgumentError, match="several starts"):
        eh.rank_flatness(eh.rank_counts(ensemble, truth).isel(start=[0]))
    with pytest.raises(eh.ArgumentError, match="dimension named 'rank'"):
        eh.rank_flatness(truth)


@pytest.mark.slow
@pytest.mark.parametrize(
    ("starts", "members", "correlation", "length"),
    [(20, 20, 0.5, 10.0), (30, 20, 0.0, 10.0), (30, 20, 0.5, 10.0), (60, 20, 0.7, 10.0),
     (60, 10, 0.5, 10.0), (120, 50, 0.5, 20.0)],
)  # fmt: skip
def test_flatness_rejects_as_often_as_it_says(starts, members, correlation, length):
    rng = np.random.default_rng([starts, members])
    cases, cells = 1500, 40
    counts = np.empty((starts, members + 1, cases))
    for case in range(cases):
        truth, ensemble = consistent(rng, starts, members, cells, correlation, length)
        rank = (ensemble < truth[:, np.newaxis]).sum(axis=1)
        counts[..., case] = (rank[:, np.newaxis] == np.arange(members + 1)[:, np.newaxis]).sum(-1)
    found = flatness(counts)
    naive = stats.chi2.sf(found.chi_square, members)
    assert (naive < 0.05).mean() > 0.5  # what ignoring the dependence does
    assert 0.02 < (found.p_value < 0.05).mean() < 0.08
    assert 0.05 < (found.p_value < 0.10).mean() < 0.13
