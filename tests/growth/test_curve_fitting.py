"""The batched fits: against exact curves, against scipy, and what cannot be fitted."""

from __future__ import annotations

import pickle
import warnings
from collections.abc import Callable

import numpy as np
import pytest
from scipy.optimize import OptimizeWarning, curve_fit

from ensemble_horizon.errors import ArgumentError
from ensemble_horizon.growth import LAWS, Reason, fit_curves

Draw = Callable[..., np.ndarray]
Noisy = Callable[..., np.ndarray]
SCALES = ("linear", "log")


def reference(
    law: str, lead: np.ndarray, curve: np.ndarray, scale: str, guess: np.ndarray
) -> tuple[np.ndarray, np.ndarray, float]:
    """Parameters, covariance and RSS by scipy.optimize.curve_fit."""
    record = LAWS[law]

    def model(time: np.ndarray, *p: float) -> np.ndarray:
        value = record.value(np.array([p]), time)[0]
        return np.log(value) if scale == "log" else value

    def slope(time: np.ndarray, *p: float) -> np.ndarray:
        table = np.array([p])
        return (record.log_jacobian if scale == "log" else record.jacobian)(table, time)[0].T

    target = np.log(curve) if scale == "log" else curve
    with warnings.catch_warnings(), np.errstate(all="ignore"):
        warnings.simplefilter("ignore", OptimizeWarning)
        found, spread = curve_fit(
            model, lead, target, p0=guess, jac=slope, ftol=1e-12, xtol=1e-12, gtol=1e-12
        )
    return found, spread, float(((target - model(lead, *found)) ** 2).sum())


@pytest.mark.parametrize("scale", SCALES)
def test_exact_curves_give_back_their_parameters(
    law_name: str, scale: str, lead: np.ndarray, draw: Draw
) -> None:
    p = draw(law_name, 200)
    fit = fit_curves(lead, LAWS[law_name].value(p, lead), law_name, scale)
    assert fit.converged.all()
    np.testing.assert_allclose(fit.parameters, p, rtol=2e-5)
    assert np.nanmax(fit.rss) < 1e-14


@pytest.mark.parametrize("scale", SCALES)
@pytest.mark.parametrize("noise", [0.03, 0.15])
def test_never_worse_than_curve_fit(
    scale: str, noise: float, lead: np.ndarray, draw: Draw, noisy: Noisy
) -> None:
    number, seed = 500, int(1000 * noise)
    curves = noisy("logistic", number, noise, seed=seed)
    guesses = draw("logistic", number, seed=seed)
    fit = fit_curves(lead, curves, "logistic", scale)
    assert fit.converged.all()
    compared = 0
    for curve, guess, rss, found in zip(curves, guesses, fit.rss, fit.parameters, strict=True):
        try:
            other, _, least = reference("logistic", lead, curve, scale, guess)
        except RuntimeError:
            continue
        # scipy knows no bounds here: a negative saturation is not a fit of this law.
        if other.min() > 0 and other[0] < other[2]:
            compared += 1
            assert rss <= least * (1.0 + 1e-6), (other, found)
    assert compared > 0.97 * number


@pytest.mark.parametrize("scale", SCALES)
def test_other_laws_never_worse_than_curve_fit(
    law_name: str, scale: str, lead: np.ndarray, draw: Draw, noisy: Noisy
) -> None:
    curves, guesses = noisy(law_name, 60, seed=5), draw(law_name, 60, seed=5)
    fit = fit_curves(lead, curves, law_name, scale)
    assert fit.converged.all()
    compared = 0
    for curve, guess, rss in zip(curves, guesses, fit.rss, strict=True):
        try:
            other, _, least = reference(law_name, lead, curve, scale, guess)
        except (RuntimeError, ValueError):
            continue
        inside = other[0] > 0 and (law_name == "exponential" or other.min() > 0)
        inside &= law_name != "power" or other[2] <= 1
        if inside and np.isfinite(least):
            compared += 1
            assert rss <= least * (1.0 + 1e-6)
    assert compared >= 35


@pytest.mark.parametrize("scale", SCALES)
def test_covariance_agrees_with_curve_fit(
    law_name: str, scale: str, lead: np.ndarray, draw: Draw, noisy: Noisy
) -> None:
    curves, guesses = noisy(law_name, 8, 0.02, seed=9), draw(law_name, 8, seed=9)
    fit = fit_curves(lead, curves, law_name, scale)
    compared = 0
    for index in range(8):
        found, spread, _ = reference(law_name, lead, curves[index], scale, guesses[index])
        if np.allclose(found, fit.parameters[index], rtol=1e-4):
            compared += 1
            deviations = np.sqrt(np.diag(spread))
            np.testing.assert_allclose(fit.standard_errors[index], deviations, rtol=2e-3)
            correlation = fit.covariance[index] / np.outer(deviations, deviations)
            expected = spread / np.outer(deviations, deviations)
            np.testing.assert_allclose(correlation, expected, atol=5e-3)
    assert compared >= 5


@pytest.mark.parametrize("scale", SCALES)
def test_gaps_equal_fitting_the_rest(
    law_name: str, scale: str, lead: np.ndarray, noisy: Noisy
) -> None:
    curves = noisy(law_name, 5, seed=3)
    gaps = np.zeros(lead.size, dtype=bool)
    gaps[[1, 7, 8, 30]] = True
    holed = np.where(gaps, np.nan, curves)
    holed[2] = curves[2]
    fit = fit_curves(lead, holed, law_name, scale)
    rest = fit_curves(lead[~gaps], curves[:, ~gaps], law_name, scale)
    others = [0, 1, 3, 4]
    assert list(fit.points) == [37, 37, 41, 37, 37]
    np.testing.assert_allclose(fit.rss[others], rest.rss[others], rtol=1e-8)
    np.testing.assert_allclose(fit.parameters[others], rest.parameters[others], rtol=1e-4)
    np.testing.assert_allclose(fit.aicc[others], rest.aicc[others], rtol=1e-8)


def test_weights_count_like_repeated_points(lead: np.ndarray, noisy: Noisy) -> None:
    curves = noisy("exponential", 4, seed=4)
    weights = np.ones(lead.size)
    weights[10:] = 3.0
    weights[5] = 0.0
    fit = fit_curves(lead, curves, "exponential", "log", weights=weights)
    for curve, found in zip(curves, fit.parameters, strict=True):
        # numpy.polyfit weights the residual, not its square.
        slope, level = np.polyfit(lead, np.log(curve), 1, w=np.sqrt(weights))
        np.testing.assert_allclose(found, [np.exp(level), slope], rtol=1e-8)
    assert (fit.points == lead.size - 1).all()
    each = fit_curves(lead, curves, "exponential", "log", np.broadcast_to(weights, curves.shape))
    np.testing.assert_array_equal(each.parameters, fit.parameters)


def test_log_scale_exponential_is_a_straight_line(lead: np.ndarray, noisy: Noisy) -> None:
    curves = noisy("exponential", 6, 0.2, seed=8)
    fit = fit_curves(lead, curves, "exponential", "log")
    for curve, found, rss in zip(curves, fit.parameters, fit.rss, strict=True):
        (slope, level), residual, *_ = np.polyfit(lead, np.log(curve), 1, full=True)
        np.testing.assert_allclose(found, [np.exp(level), slope], rtol=1e-9)
        assert rss == pytest.approx(residual[0], rel=1e-9)


def test_what_cannot_be_fitted_says_why(lead: np.ndarray) -> None:
    growing = 0.1 * np.exp(0.01 * lead)
    sparse = np.where(np.arange(lead.size) < 3, growing, np.nan)
    falling = growing[::-1]
    rows = [growing, sparse, np.full_like(lead, np.nan), 0 * lead, 0 * lead + 2.0, falling]
    for name, law in LAWS.items():
        fit = fit_curves(lead, np.array(rows), name)
        few, constant = Reason.too_few_points, Reason.constant
        assert list(fit.reason) == [Reason.fitted, few, few, constant, constant, Reason.no_growth]
        assert np.isnan(fit.parameters[1:5]).all()
        assert not fit.converged[1:5].any()
        if law.may_fall:
            assert fit.parameters[5, 1] == pytest.approx(-0.01)
        else:
            assert np.isnan(fit.parameters[5]).all()


def test_curve_without_saturation_ends_at_the_bound(lead: np.ndarray) -> None:
    faster = 0.01 * np.exp(0.01 * lead + 4e-5 * lead**2)
    fit = fit_curves(lead, faster[None], "logistic")
    alone = fit_curves(lead, faster[None], "exponential")
    assert fit.converged.all()
    assert np.isinf(fit.parameters[0, 2])
    np.testing.assert_allclose(fit.parameters[0, :2], alone.parameters[0], rtol=1e-6)
    assert np.isnan(fit.covariance[0, 2]).all()
    # One parameter more is counted in s^2 = RSS/(points - P).
    ratio = (lead.size - 2) / (lead.size - 3)
    np.testing.assert_allclose(fit.covariance[0, :2, :2], alone.covariance[0] * ratio, rtol=1e-4)


def test_growth_faster_than_linear_only_down_to_zero(lead: np.ndarray) -> None:
    """A perfect start and a straight line are both at bounds of the power law."""
    perfect = (0.02 * 0.5 * lead) ** 2.0
    fit = fit_curves(lead, np.stack([perfect, 0.3 + 0.01 * lead]), "power")
    np.testing.assert_allclose(fit.parameters[0], [0.0, 0.02, 0.5], rtol=1e-5, atol=1e-9)
    np.testing.assert_allclose(fit.parameters[1], [0.3, 0.01, 1.0], rtol=1e-5)


def test_noise_free_start_of_zero(lead: np.ndarray) -> None:
    """Model error only: the error is zero at lead zero."""
    curve = LAWS["logistic-source"].value(np.array([[0.0, 0.01, 0.004, 1.2]]), lead)
    fit = fit_curves(lead, curve, "logistic-source")
    np.testing.assert_allclose(fit.parameters[0], [0.0, 0.01, 0.004, 1.2], rtol=1e-4, atol=1e-5)


def test_single_precision_and_no_curves(lead: np.ndarray, noisy: Noisy) -> None:
    curves = noisy("logistic", 3)
    single = fit_curves(lead, curves.astype(np.float32), "logistic")
    double = fit_curves(lead, curves, "logistic")
    np.testing.assert_allclose(single.parameters, double.parameters, rtol=1e-5)
    empty = fit_curves(lead, np.empty((0, lead.size)), "logistic")
    assert empty.parameters.shape == (0, 3)


def test_fits_travel_between_processes(lead: np.ndarray, noisy: Noisy) -> None:
    fit = fit_curves(lead, noisy("power", 3), "power")
    again = pickle.loads(pickle.dumps(fit))
    np.testing.assert_array_equal(again.parameters, fit.parameters)
    assert again.law == "power"


def test_input_is_left_alone(lead: np.ndarray, noisy: Noisy) -> None:
    curves = noisy("logistic", 3)
    curves[0, 3] = np.nan
    before = curves.copy()
    fit_curves(lead, curves, "logistic", "log")
    np.testing.assert_array_equal(curves, before)


def test_wrong_arguments_are_named(lead: np.ndarray) -> None:
    curves = np.ones((2, lead.size))
    with pytest.raises(ArgumentError, match="scale: expected one of linear, log"):
        fit_curves(lead, curves, "logistic", "cubic")
    with pytest.raises(ArgumentError, match=r"curves: expected an array \(N, 41\)"):
        fit_curves(lead, curves[:, 1:], "logistic")
    with pytest.raises(ArgumentError, match="weights: expected numbers of at least zero"):
        fit_curves(lead, curves, "logistic", weights=-np.ones(lead.size))
