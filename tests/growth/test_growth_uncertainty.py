"""First-order uncertainty against refits and simulation."""

from __future__ import annotations

from collections.abc import Callable

import numpy as np
import pytest

from ensemble_horizon.errors import ArgumentError
from ensemble_horizon.growth import (
    LAWS,
    delta_covariance,
    doubling_error,
    fit_curves,
    growth_rate_error,
    parameter_sensitivity,
    time_gradient,
)

Draw = Callable[..., np.ndarray]
Noisy = Callable[..., np.ndarray]


@pytest.mark.parametrize("scale", ["linear", "log"])
def test_sensitivity_is_what_a_refit_does(
    law_name: str, scale: str, lead: np.ndarray, draw: Draw
) -> None:
    """On an exact curve the Gauss-Newton map is the exact derivative."""
    law, p = LAWS[law_name], draw(law_name, 3)
    curves = law.value(p, lead)
    sensitivity = parameter_sensitivity(law, p, lead, scale)
    assert sensitivity.shape == (3, len(law.parameters), lead.size)
    for column in (0, 9, 25, 40):
        step = np.zeros(lead.size)
        step[column] = 1e-4
        above = fit_curves(lead, curves * np.exp(step), law, scale, tolerance=1e-18).parameters
        below = fit_curves(lead, curves * np.exp(-step), law, scale, tolerance=1e-18).parameters
        numerical = (above - below) / 2e-4
        size = np.abs(sensitivity).max(axis=2)
        np.testing.assert_allclose(sensitivity[:, :, column] / size, numerical / size, atol=2e-4)


def test_sensitivity_with_gaps(lead: np.ndarray, draw: Draw) -> None:
    p = draw("logistic", 2)
    usable = np.ones(lead.size, dtype=bool)
    usable[[3, 20]] = False
    holed = parameter_sensitivity("logistic", p, lead, usable=usable)
    assert (holed[:, :, ~usable] == 0).all()
    np.testing.assert_allclose(
        holed[:, :, usable], parameter_sensitivity("logistic", p, lead[usable]), rtol=1e-9
    )


def test_parameters_at_a_bound_do_not_move(lead: np.ndarray) -> None:
    endless = parameter_sensitivity("logistic", np.array([[0.1, 0.02, np.inf]]), lead)
    plain = parameter_sensitivity("exponential", np.array([[0.1, 0.02]]), lead)
    assert (endless[:, 2] == 0).all()
    np.testing.assert_allclose(endless[:, :2], plain, rtol=1e-8)
    lost = parameter_sensitivity("logistic", np.full((1, 3), np.nan), lead)
    assert np.isnan(lost).all()


def test_independent_noise_gives_the_covariance_of_least_squares(
    law_name: str, lead: np.ndarray, noisy: Noisy
) -> None:
    fit = fit_curves(lead, noisy(law_name, 4, 0.03), law_name, "log")
    sensitivity = parameter_sensitivity(law_name, fit.parameters, lead, "log")
    noise = fit.rss / (fit.points - fit.parameters.shape[1])
    each = noise[:, None, None] * np.eye(lead.size)
    inside = np.isfinite(fit.covariance).all(axis=(1, 2))
    assert inside.sum() >= 3
    np.testing.assert_allclose(
        delta_covariance(sensitivity, each)[inside], fit.covariance[inside], rtol=1e-5
    )


def test_correlated_noise_against_simulation(lead: np.ndarray) -> None:
    law, p = LAWS["logistic"], np.array([[0.1, 0.03, 1.2]])
    gap = np.abs(lead[:, None] - lead[None])
    covariance = 0.03**2 * np.exp(-gap / 24.0)
    rng = np.random.default_rng(2)
    draws = rng.multivariate_normal(np.zeros(lead.size), covariance, 4000)
    refits = fit_curves(lead, law.value(p, lead) * np.exp(draws), law, "log").parameters
    spread = delta_covariance(parameter_sensitivity(law, p, lead, "log"), covariance)
    np.testing.assert_allclose(refits.std(axis=0), np.sqrt(np.diagonal(spread[0])), rtol=0.06)


def test_shapes_of_the_covariance_are_checked(lead: np.ndarray, draw: Draw) -> None:
    sensitivity = parameter_sensitivity("logistic", draw("logistic", 2), lead)
    with pytest.raises(ArgumentError, match="covariance: expected shape"):
        delta_covariance(sensitivity, np.eye(3))
    many = np.tile(sensitivity, (5000, 1, 1))
    assert delta_covariance(many, np.eye(lead.size)).shape == (10000, 3, 3)


def test_time_gradient_is_the_derivative(law_name: str, draw: Draw) -> None:
    law, p = LAWS[law_name], draw(law_name, 5)
    size = 1.8 * p[:, 0]
    gradient = time_gradient(law, p, size)
    for index in range(p.shape[1]):
        step = np.zeros_like(p)
        step[:, index] = 1e-5 * p[:, index]
        numerical = (law.time_to(p + step, size) - law.time_to(p - step, size)) / (
            2.0 * step[:, index]
        )
        np.testing.assert_allclose(gradient[:, index], numerical, rtol=1e-5)
    beyond = time_gradient("logistic", np.array([[0.1, 0.02, 1.0]]), 2.0)
    assert np.isnan(beyond).all()


def test_errors_of_rate_and_doubling_time(law_name: str, lead: np.ndarray, noisy: Noisy) -> None:
    """Against derivatives by finite differences."""
    law = LAWS[law_name]
    fit = fit_curves(lead, noisy(law_name, 12, 0.02), law_name)
    inside = np.isfinite(fit.covariance).all(axis=(1, 2)) & (fit.parameters > 0).all(axis=1)
    assert inside.sum() >= 6
    p, covariance = fit.parameters[inside], fit.covariance[inside]
    for function, error in (
        (law.growth_rate, growth_rate_error),
        (law.doubling_time, doubling_error),
    ):
        gradient = np.empty_like(p)
        for index in range(p.shape[1]):
            step = np.zeros_like(p)
            step[:, index] = 1e-6 * p[:, index]
            gradient[:, index] = (function(p + step) - function(p - step)) / (2.0 * step[:, index])
        expected = np.sqrt(np.einsum("ni,nij,nj->n", gradient, covariance, gradient))
        np.testing.assert_allclose(error(law, p, covariance), expected, rtol=1e-4)
