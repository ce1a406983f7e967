"""Sampling noise of spread against chi-square theory and simulation."""

import numpy as np
import pytest
import xarray as xr
from scipy import special, stats

import ensemble_horizon as eh
from ensemble_horizon.spread.kurtosis import pooled_kurtosis
from ensemble_horizon.spread.moments import member_deviations
from ensemble_horizon.spread.sampling import (
    LeadNoise,
    noise_from_gram,
    noise_from_points,
    pooled_noise,
)

MEMBERS = 20


def gram_of(values):
    """Inner products (L, M, M) of members (L, M, C)."""
    deviation = values - values.mean(axis=1, keepdims=True)
    return deviation @ deviation.transpose(0, 2, 1) / values.shape[2]


def test_band_of_one_point_is_the_exact_chi_square_interval():
    # (M-1) s^2 / sigma^2 is chi-square with M-1 degrees of freedom (any handbook).
    noise = LeadNoise(np.array([MEMBERS - 1.0]), np.eye(1))
    low, high = noise.band(0.9)
    draws = np.random.default_rng(0).normal(size=(20000, MEMBERS)).std(axis=1, ddof=1)
    covered = (draws * low <= 1) & (draws * high >= 1)
    assert covered.mean() == pytest.approx(0.9, abs=0.008)
    assert low[0] == pytest.approx(np.sqrt(19 / stats.chi2.ppf(0.95, 19)))


def test_relative_sampling_error_is_that_of_the_handbooks():
    # 1/sqrt(2(M-1)) for large M (common practice).
    noise = LeadNoise(np.array([400.0]), np.eye(1))
    error = np.sqrt(noise.log_spread_covariance()[0, 0])
    assert error == pytest.approx(1 / np.sqrt(2 * 400), rel=5e-3)


def test_one_point_has_one_less_degree_of_freedom_than_members():
    values = np.random.default_rng(1).normal(size=(5, MEMBERS, 1))
    np.testing.assert_allclose(noise_from_gram(gram_of(values)).dof, MEMBERS - 1)


def test_independent_cells_multiply_the_degrees_of_freedom():
    # The mean of C independent chi-squares has C times the degrees of freedom.
    cells, found = 25, []
    rng = np.random.default_rng(2)
    for _ in range(200):
        found.append(noise_from_gram(gram_of(rng.normal(size=(1, MEMBERS, cells)))).dof[0])
    assert np.median(found) == pytest.approx(cells * (MEMBERS - 1), rel=0.1)


@pytest.mark.parametrize("rho", [0.0, 0.6, 0.9, 1.0])
def test_correlation_between_leads_is_the_square_of_that_of_the_members(rho):
    # Covariance of Gaussian squares: Cov(x^2, y^2) = 2 Cov(x, y)^2 (Isserlis 1918, Biometrika).
    rng, found = np.random.default_rng(3), []
    for _ in range(300):
        first = rng.normal(size=MEMBERS)
        second = rho * first + np.sqrt(1 - rho**2) * rng.normal(size=MEMBERS)
        values = np.stack([first, second])[:, :, np.newaxis]
        deviation = values - values.mean(axis=1, keepdims=True)
        cross = np.einsum("lmc,lkc->lmk", deviation, deviation)
        found.append(noise_from_gram(cross).correlation[0, 1])
    assert np.mean(found) == pytest.approx(rho**2, abs=0.06)


def test_pooled_points_give_the_correlation_with_far_less_scatter():
    rng = np.random.default_rng(4)
    first = rng.normal(size=(MEMBERS, 400))
    second = 0.8 * first + 0.6 * rng.normal(size=(MEMBERS, 400))
    noise = noise_from_points(np.stack([first, second]))
    assert noise.correlation[0, 1] == pytest.approx(0.64, abs=0.03)
    np.testing.assert_allclose(noise.dof, MEMBERS - 1)


@pytest.mark.parametrize("stretch", [1.0, 0.5, 0.0])
def test_two_components_have_the_degrees_of_freedom_of_their_directions(stretch):
    # Satterthwaite 1946, Biometrics Bulletin: (a + b)^2 / (a^2 + b^2) (M - 1) for variances a, b.
    rng, rho = np.random.default_rng(11), 0.8
    first = rng.normal(size=(MEMBERS, 400, 2))
    second = rho * first + np.sqrt(1 - rho**2) * rng.normal(size=first.shape)
    values = np.stack([first, second]) * np.array([1.0, stretch])
    values -= values.mean(axis=1, keepdims=True)
    expected = (1 + stretch**2) ** 2 / (1 + stretch**4) * (MEMBERS - 1)
    noise = noise_from_points(values)
    np.testing.assert_allclose(noise.dof, expected, rtol=0.06)
    assert noise.correlation[0, 1] == pytest.approx(rho**2, abs=0.03)
    # A site, one by one, and its kin: a region of two points.
    sites = [noise_from_gram(gram_of(values[:, :, k])) for k in range(400)]
    assert np.median([site.dof[0] for site in sites]) == pytest.approx(expected, rel=0.06)
    # What the variances of the 400 points themselves say, members and points drawn afresh.
    variance = (values**2).sum(axis=(1, 3)) / (MEMBERS - 1)
    seen = 2 * variance.mean(axis=1) ** 2 / variance.var(axis=1)
    np.testing.assert_allclose(noise.dof, seen, rtol=0.25)


@pytest.mark.parametrize("stretch", [1.0, 0.3])
def test_components_that_are_far_out_together_widen_as_simulated(stretch):
    # Bivariate Laplace: a Gaussian times the root of an exponential; excess kurtosis 3.
    rng = np.random.default_rng(13)
    values = rng.normal(size=(1, MEMBERS, 20000, 2)) * np.array([1.0, stretch])
    values *= np.sqrt(rng.exponential(size=(1, MEMBERS, 20000, 1)))
    values -= values.mean(axis=1, keepdims=True)
    kurtosis = pooled_kurtosis(values)
    variance = (values[0] ** 2).sum(axis=(0, 2)) / (MEMBERS - 1)
    seen = 2 * variance.mean() ** 2 / variance.var()
    assert noise_from_points(values, kurtosis).dof[0] == pytest.approx(seen, rel=0.08)
    sites = [noise_from_gram(gram_of(values[:, :, k]), kurtosis, True).dof for k in range(500)]
    assert np.median(sites) == pytest.approx(seen, rel=0.15)


def test_gaps_and_leads_without_spread_do_not_harm_two_components():
    values = np.random.default_rng(12).normal(size=(3, MEMBERS, 40, 2))
    values -= values.mean(axis=1, keepdims=True)
    values[0] = 0.0
    values[2, 3] = np.nan
    noise = noise_from_points(values)
    assert noise.dof[0] == MEMBERS - 1
    assert noise.correlation[0, 1] == pytest.approx(0.0, abs=1e-6)
    assert noise.dof[2] == pytest.approx(2 * (MEMBERS - 2), rel=0.15)


def test_the_log_spread_covariance_is_that_of_simulated_spreads():
    rng = np.random.default_rng(5)
    rho, number = 0.9, 20000
    first = rng.normal(size=(number, MEMBERS))
    second = rho * first + np.sqrt(1 - rho**2) * rng.normal(size=(number, MEMBERS))
    logs = np.log([first.std(axis=1, ddof=1), second.std(axis=1, ddof=1)])
    noise = LeadNoise(np.full(2, MEMBERS - 1.0), np.array([[1, rho**2], [rho**2, 1]]))
    np.testing.assert_allclose(noise.log_spread_covariance(), np.cov(logs), rtol=0.05)


def test_heavy_tails_are_seen_and_widen():
    rng = np.random.default_rng(6)
    normal = rng.normal(size=(3, MEMBERS, 500))
    assert pooled_kurtosis(normal) < 0.1
    heavy = rng.laplace(size=(3, MEMBERS, 500))
    # Excess kurtosis of the Laplace distribution is 3 (any handbook); few members see a part.
    assert 1.5 < pooled_kurtosis(heavy) < 3.5
    wide = noise_from_points(heavy, pooled_kurtosis(heavy)).dof[0]
    simulated = rng.laplace(size=(MEMBERS, 40000)).var(axis=0, ddof=1)
    worth = 2 * simulated.mean() ** 2 / simulated.var()
    assert wide == pytest.approx(worth, rel=0.25)


def test_constant_members_have_no_kurtosis_and_no_error():
    assert pooled_kurtosis(np.ones((4, MEMBERS, 3))) == 0.0
    assert np.isfinite(noise_from_points(np.ones((4, MEMBERS, 3))).correlation).all()
    assert np.isfinite(noise_from_gram(np.zeros((4, MEMBERS, MEMBERS))).correlation).all()


def test_front_equals_the_kernel_on_a_field():
    rng = np.random.default_rng(7)
    values = rng.normal(size=(3, MEMBERS, 4, 5))
    data = xr.DataArray(
        values,
        dims=("lead", "member", "latitude", "longitude"),
        coords={
            "lead": [0.0, 6.0, 12.0],
            "latitude": [0.0, 0.0, 0.0, 0.0],
            "longitude": np.arange(5.0),
        },
    )
    found = eh.sampling(data)
    flat = values.reshape(3, MEMBERS, 20)
    expected = noise_from_gram(gram_of(flat), pooled_kurtosis(flat))
    np.testing.assert_allclose(found.dof, expected.dof)
    np.testing.assert_allclose(found.noise_correlation, expected.correlation)


def test_many_starts_widen_by_student_and_by_serial_dependence():
    rng = np.random.default_rng(8)
    starts, leads = 60, 3
    noise = LeadNoise(np.full(leads, 1e6), np.eye(leads))
    white = np.exp(0.3 * rng.normal(size=(starts, 1, 1))) * np.ones((1, leads, 1))
    red = np.empty(starts)
    red[0] = rng.normal()
    for number in range(1, starts):
        red[number] = 0.8 * red[number - 1] + 0.6 * rng.normal()
    serial = np.exp(0.3 * red)[:, np.newaxis, np.newaxis] * np.ones((1, leads, 1))
    free = pooled_noise(white, [noise] * starts, 0.9)
    bound = pooled_noise(serial, [noise] * starts, 0.9)
    assert free.inflation == pytest.approx(stats.t.ppf(0.95, starts - 1) / special.ndtri(0.95))
    # Variance of a mean of an AR(1) of 0.8 is up to (1+r)/(1-r) = 9 times that of white noise.
    assert bound.dof[0] < free.dof[0] / 1.8


def test_newey_west_equals_statsmodels():
    from statsmodels.stats.sandwich_covariance import S_hac_simple

    rng = np.random.default_rng(9)
    starts = 40
    variances = rng.gamma(5, size=(starts, 2, 1))
    noise = LeadNoise(np.full(2, 19.0), np.eye(2))
    found = pooled_noise(variances, [noise] * starts, 0.9)
    departure = (variances / variances.mean(axis=0) - 1)[:, :, 0]
    bandwidth = int(4 * (starts / 100) ** (2 / 9))
    total = S_hac_simple(departure, nlags=bandwidth)  # sum over starts, Bartlett weights
    expected = total / (starts - 1) / starts
    np.testing.assert_allclose(2 / found.dof, np.diag(expected), rtol=1e-9)


def test_deviations_sum_to_zero():
    deviation, _ = member_deviations(np.random.default_rng(10).normal(300, 1, size=(9, 100)))
    np.testing.assert_allclose(deviation.sum(axis=0), 0, atol=1e-10)


def test_a_lead_without_spread_or_value_has_finite_noise():
    # Runs from one analysis, or accumulations at lead zero: no spread; a lost lead: no value.
    rng = np.random.default_rng(11)
    values = rng.normal(size=(4, MEMBERS, 1))
    values[0] = 5.0
    values[2] = np.nan
    gram = np.nan_to_num(gram_of(values))
    noise = noise_from_gram(gram)
    assert np.isfinite(noise.log_spread_covariance()).all()
    np.testing.assert_allclose(noise.dof[[1, 3]], MEMBERS - 1)
    np.testing.assert_allclose(noise.correlation[2, [0, 1, 3]], 0, atol=1e-7)


def test_pooled_noise_counts_the_starts_that_have_a_lead():
    # Var of a mean of n sample variances of M Gaussian members: 2 / (n (M - 1)) (any handbook).
    rng = np.random.default_rng(12)
    few = rng.chisquare(19, size=(4, 2, 1)) / 19
    few[1:, 1] = np.nan
    noise = LeadNoise(np.full(2, 19.0), np.eye(2))
    assert pooled_noise(few, [noise] * 4, 0.9).dof[1] == pytest.approx(19)
    many = rng.chisquare(19, size=(200, 2, 400)) / 19
    many[::2, 1] = np.nan
    found = pooled_noise(many, [noise] * 200, 0.9)
    np.testing.assert_allclose(2 / found.dof, [2 / 19 / 200, 2 / 19 / 100], rtol=0.1)


def test_heavy_tails_are_seen_beside_gaps_and_leads_without_spread():
    values = np.random.default_rng(13).standard_t(5, size=(4, MEMBERS, 400))
    whole = pooled_kurtosis(values)
    assert whole > 1
    gap = values.copy()
    gap[2, 3] = np.nan  # one member at one lead
    assert pooled_kurtosis(gap) == pytest.approx(pooled_kurtosis(np.delete(values, 3, axis=1)))
    shared = values.copy()
    shared[0] = 1.0
    assert pooled_kurtosis(shared) == pytest.approx(pooled_kurtosis(values[1:]))
    lost = values.copy()
    lost[3] = np.nan
    assert pooled_kurtosis(lost) == pytest.approx(pooled_kurtosis(values[:3]))


def test_sampling_does_not_depend_on_the_order_of_dimensions():
    rng = np.random.default_rng(14)
    coords = {"lead": [0.0, 6.0], "latitude": np.linspace(0, 88, 6), "longitude": np.arange(8.0)}
    dims = ("lead", "member", "latitude", "longitude")
    members = xr.DataArray(rng.normal(size=(2, 10, 6, 8)), dims=dims, coords=coords)
    area = xr.DataArray(
        rng.uniform(1, 9, size=(6, 8)), dims=dims[2:], coords={k: coords[k] for k in dims[2:]}
    )
    turned = members.transpose("lead", "longitude", "member", "latitude")
    for cells in (None, area):
        expected = eh.sampling(members, area=cells)
        other = None if cells is None else cells.transpose()
        xr.testing.assert_allclose(eh.sampling(turned, area=other), expected)
    xr.testing.assert_allclose(
        eh.sampling(members.isel(lead=[0]).expand_dims(start=[0])),
        eh.sampling(members.isel(lead=[0])),
    )


def test_sampling_refuses_several_starts():
    members = xr.DataArray(
        np.random.default_rng(15).normal(size=(2, 3, 5)), dims=("start", "lead", "member")
    )
    with pytest.raises(eh.ArgumentError, match=r"expected one start; found 2 starts"):
        eh.sampling(members)
