"""CRPS against its definition, closed forms and the double sum."""

import itertools

import dask.array
import numpy as np
import pytest
import xarray as xr
from scipy import integrate, stats

import ensemble_horizon as eh
from ensemble_horizon.skill.crps import crps_of_departures, gaussian_crps
from ensemble_horizon.skill.ordering import ordered_rows


def double_sum(members, analysis, fair):
    """The sum over all pairs of members, as it is written in the papers."""
    members = members[np.isfinite(members)]
    number = members.size
    apart = np.abs(members[:, np.newaxis] - members).sum()
    pairs = number * (number - 1) if fair else number**2
    return np.abs(members - analysis).mean() - apart / (2 * pairs)


def integral(members, analysis):
    """The definition: the integral of (F - step)^2, piece by piece between the jumps."""
    edges = np.sort(np.append(members, analysis))

    def square(x):
        return (np.mean(members <= x) - (analysis <= x)) ** 2

    middle = [(a, b, square((a + b) / 2)) for a, b in itertools.pairwise(edges)]
    return sum(integrate.quad(lambda x, s=s: s, a, b)[0] for a, b, s in middle if b > a)


@pytest.mark.parametrize("members", [1, 2, 3, 20, 51, 130])
@pytest.mark.parametrize("kind", ["f4", "f8"])
def test_crps_is_the_double_sum_and_the_integral(members, kind):
    rng = np.random.default_rng(members)
    values = rng.normal(0, 2, (members, 7)).astype(kind)
    analysis = rng.normal(0, 3, 7).astype(kind)
    raw = crps_of_departures(values - analysis, fair=False)
    assert raw.dtype == kind
    close = {"rtol": 1e-5 if kind == "f4" else 1e-12, "atol": 1e-6 if kind == "f4" else 1e-12}
    wanted = [double_sum(values[:, p].astype(float), analysis[p], False) for p in range(7)]
    np.testing.assert_allclose(raw, wanted, **close)
    for point in range(7):
        whole = integral(values[:, point].astype(float), float(analysis[point]))
        np.testing.assert_allclose(raw[point], whole, rtol=1e-4, atol=1e-6)
    if members > 1:
        fair = crps_of_departures(values - analysis)
        wanted = [double_sum(values[:, p].astype(float), analysis[p], True) for p in range(7)]
        np.testing.assert_allclose(fair, wanted, **close)


def test_members_without_a_value_are_left_out_and_counted():
    rng = np.random.default_rng(3)
    values = rng.normal(size=(12, 50))
    values[rng.random(values.shape) < 0.3] = np.nan
    analysis = rng.normal(size=50)
    values[:, 0] = np.nan
    values[1:, 1] = np.nan
    values[0, 1] = 2.0
    for fair in (True, False):
        found = crps_of_departures(values - analysis, fair)
        wanted = [double_sum(values[:, p], analysis[p], fair) for p in range(2, 50)]
        np.testing.assert_allclose(found[2:], wanted, rtol=1e-12)
        assert np.isnan(found[0])
    assert np.isnan(crps_of_departures(values - analysis)[1])  # one member: fair is undefined
    assert crps_of_departures(values - analysis, fair=False)[1] == abs(2.0 - analysis[1])


def test_ties_and_constant_members():
    departure = np.array([[1.0, 0.0], [1.0, 0.0], [1.0, 0.0], [2.0, 0.0]])
    np.testing.assert_allclose(
        crps_of_departures(departure, fair=False),
        [double_sum(departure[:, 0], 0.0, False), 0.0],
        atol=1e-15,
    )


def test_many_gaussian_members_have_the_closed_form_of_the_gaussian():
    # Gneiting et al. 2005, from memory; 0.23370 sigma for an analysis in the middle.
    quantiles = stats.norm.ppf((np.arange(20000) + 0.5) / 20000)[:, np.newaxis]
    for z in (0.0, 0.7, -2.5):
        raw = crps_of_departures(quantiles - z, fair=False)[0]
        np.testing.assert_allclose(raw, gaussian_crps(np.array([z]), np.array([1.0]))[0], atol=2e-5)
    assert abs(gaussian_crps(np.array([0.0]), np.array([3.0]))[0] / 3 - 0.23370) < 1e-5


def test_gaussian_crps_is_its_integral_and_the_absolute_error_without_spread():
    for z, sigma in ((0.3, 2.0), (-4.0, 0.5)):
        whole = integrate.quad(
            lambda x, z=z, s=sigma: (stats.norm.cdf(x, scale=s) - (x >= z)) ** 2,
            -15, 15, points=[z], limit=200,
        )[0]  # fmt: skip
        np.testing.assert_allclose(
            gaussian_crps(np.array([z]), np.array([sigma])), whole, rtol=1e-6
        )
    assert gaussian_crps(np.array([-3.0]), np.array([0.0])).tolist() == [3.0]


def test_the_fair_score_of_few_members_is_that_of_many_on_average():
    # Ferro 2014: what an ensemble of infinitely many members would score; here sigma = 1, z random,
    # E[CRPS] of the Gaussian that is right = 1/sqrt(pi) (Gneiting et al. 2005).
    rng = np.random.default_rng(1)
    fair = crps_of_departures(rng.normal(size=(3, 200000)) - rng.normal(size=200000))
    assert abs(fair.mean() - 1 / np.sqrt(np.pi)) < 4 * fair.std() / np.sqrt(200000)


@pytest.mark.parametrize("members", [*range(1, 40), 64, 100, 300])
def test_ordered_rows_are_sorted_columns(members):
    # By the 0-1 principle zeros and ones are enough, and ties are in them (Knuth, volume 3).
    rng = np.random.default_rng(members)
    values = np.concatenate(
        [rng.normal(size=(members, 50)), (rng.random((members, 200)) < rng.random(200))], axis=1
    )
    kept = values.copy()
    np.testing.assert_array_equal(np.stack(ordered_rows(values)), np.sort(values, axis=0))
    np.testing.assert_array_equal(values, kept)


def test_the_front_keeps_labels_stays_lazy_and_agrees_with_the_kernel():
    rng = np.random.default_rng(0)
    ensemble = xr.DataArray(
        rng.normal(size=(3, 2, 8, 4, 5)).astype("f4"),
        dims=("start", "lead", "member", "latitude", "longitude"),
        coords={"lead": [6.0, 12.0], "latitude": np.arange(4.0), "longitude": np.arange(5.0)},
        attrs={"units": "K"},
    )
    analysis = ensemble.isel(member=0, drop=True) + 0.5
    analysis = analysis.assign_attrs(units="kelvin")
    eager = eh.crps(ensemble, analysis)
    assert eager.dims == ("start", "lead", "latitude", "longitude")
    assert eager.attrs["units"] == "K"
    assert eager.dtype == np.float32
    wanted = crps_of_departures(
        (ensemble - analysis).transpose("member", ...).values.reshape(8, -1)
    )
    np.testing.assert_allclose(eager.values.ravel(), wanted, rtol=1e-6)
    lazy = eh.crps(ensemble.chunk({"start": 1, "member": 3}), analysis.chunk({"start": 1}))
    assert isinstance(lazy.data, dask.array.Array)
    xr.testing.assert_allclose(lazy.compute(), eager)


@pytest.mark.parametrize("kind", ["f4", "f8"])
def test_the_gaussian_crps_keeps_the_precision_it_is_given(kind):
    rng = np.random.default_rng(8)
    deviation = rng.uniform(0.2, 4, 200)
    departure = deviation * rng.normal(0, 2, 200)
    found = gaussian_crps(departure.astype(kind), deviation.astype(kind))
    assert found.dtype == kind
    z = departure / deviation
    wanted = z * (2 * stats.norm.cdf(z) - 1) + 2 * stats.norm.pdf(z) - 1 / np.sqrt(np.pi)
    np.testing.assert_allclose(found, deviation * wanted, rtol=2e-6 if kind == "f4" else 1e-12)
