"""Contract of the growth laws, one test for all of the registry."""

from __future__ import annotations

import pickle
from collections.abc import Callable

import numpy as np
import pytest
from scipy.integrate import solve_ivp

from ensemble_horizon.errors import ArgumentError
from ensemble_horizon.growth import LAWS, find_law
from ensemble_horizon.growth.clock import Clock

Draw = Callable[..., np.ndarray]


def speed(law: str, p: np.ndarray, error: np.ndarray) -> np.ndarray:
    """dE/dt of each law, written down from its differential equation."""
    if law == "exponential":
        return p[1] * error
    if law == "logistic":
        return p[1] * error * (1.0 - error / p[2])
    if law == "power":
        return p[1] * error ** (1.0 - p[2])
    variance = error**2
    return (2.0 * p[1] * variance + p[2]) * (1.0 - variance / p[3] ** 2) / (2.0 * error)


def test_registry_names_its_laws() -> None:
    assert list(LAWS) == ["exponential", "logistic", "logistic-source", "power"]
    for name, law in LAWS.items():
        assert law.name == name
        assert pickle.loads(pickle.dumps(law)) == law
    with pytest.raises(ArgumentError, match="did you mean 'logistic'"):
        find_law("logistc")


def test_value_solves_the_differential_equation(
    law_name: str, lead: np.ndarray, draw: Draw
) -> None:
    law = LAWS[law_name]
    for p in draw(law_name, 4):
        solution = solve_ivp(
            lambda t, e, p=p: speed(law_name, p, e),
            (0.0, lead[-1]),
            [p[0]],
            t_eval=lead,
            rtol=1e-10,
            atol=1e-12,
        )
        np.testing.assert_allclose(law.value(p[None], lead)[0], solution.y[0], rtol=1e-7)


def test_jacobian_is_the_derivative(law_name: str, lead: np.ndarray, draw: Draw) -> None:
    law = LAWS[law_name]
    p = draw(law_name, 6)
    slopes = law.jacobian(p, lead)
    assert slopes.shape == (6, len(law.parameters), lead.size)
    for index in range(len(law.parameters)):
        step = np.zeros_like(p)
        step[:, index] = 1e-5 * p[:, index]
        rise = law.value(p + step, lead) - law.value(p - step, lead)
        numerical = rise / (2.0 * step[:, index, None])
        scale = np.abs(numerical).max(axis=1, keepdims=True)
        np.testing.assert_allclose(slopes[:, index] / scale, numerical / scale, atol=1e-8)
    np.testing.assert_allclose(
        law.log_jacobian(p, lead), slopes / law.value(p, lead)[:, None], rtol=1e-14
    )


def theta_of(law_name: str) -> np.ndarray:
    """Fitting parameters (P, 3) well inside the bounds."""
    return {
        "exponential": np.array([[-2.0, -1.0, 0.0], [2.0, 1.0, -1.0]]),
        "logistic": np.array([[-1.0, -1.2, -0.9], [-2.0, -1.0, -3.0], [5.0, 4.0, 9.0]]),
        "logistic-source": np.array(
            [[0.1, 0.2, 0.05], [3.0, 1e-5, 8.0], [0.5, 1e-6, 0.01], [0.9, 1e-5, 1.1]]
        ),
        "power": np.array([[0.0, -0.1, 0.1], [0.9, 0.5, 2e-4], [0.3, 1.0, 3.0]]),
    }[law_name]


def test_form_says_the_same_as_the_law(law_name: str, lead: np.ndarray) -> None:
    law, clock, theta = LAWS[law_name], Clock(lead), theta_of(law_name)
    scale = np.array([2.0, 0.5, 1.0])
    natural, slope, held = law.form.natural(theta, scale, clock.span)
    value, _ = law.form.evaluate(theta, clock)
    assert not held.any()
    np.testing.assert_allclose(law.value(natural.T, lead), (value * scale).T, rtol=1e-10)
    for index in range(theta.shape[0]):
        step = np.zeros_like(theta)
        step[index] = 1e-6 * np.maximum(np.abs(theta[index]), 1e-3)
        step[index] = np.minimum(step[index], 0.1 * np.abs(theta[index]) + (theta[index] == 0))
        above = law.form.natural(theta + step, scale, clock.span)[0]
        below = law.form.natural(theta - step, scale, clock.span)[0]
        numerical = (above - below) / (2.0 * step[index])
        np.testing.assert_allclose(
            slope[:, index], numerical, rtol=1e-4, atol=1e-5 * np.abs(slope).max()
        )


@pytest.mark.parametrize("irregular", [False, True])
def test_form_slopes_are_derivatives(law_name: str, lead: np.ndarray, irregular: bool) -> None:
    if irregular:
        lead = np.cumsum(np.random.default_rng(3).uniform(1.0, 9.0, lead.size))
    law, clock, theta = LAWS[law_name], Clock(lead), theta_of(law_name)
    slopes = [np.array(part) for part in law.form.evaluate(theta, clock)[1]]
    for index, analytic in enumerate(slopes):
        step = np.zeros_like(theta)
        step[index] = np.minimum(1e-5, 0.1 * np.abs(theta[index]) + (theta[index] == 0))
        above = np.log(law.form.evaluate(theta + step, clock)[0])
        below = np.log(law.form.evaluate(theta - step, clock)[0])
        numerical = (above - below) / (2.0 * step[index])
        np.testing.assert_allclose(analytic, numerical, rtol=1e-4, atol=1e-5)


def test_second_derivative_of_the_source_form(lead: np.ndarray) -> None:
    form, clock = LAWS["logistic-source"].form, Clock(lead)
    theta = theta_of("logistic-source")
    # The small initial error is where the term matters: it is exact as the feedback vanishes.
    theta[0], theta[1] = 1e-3, 1e-4
    value, slopes = form.evaluate(theta, clock)
    value, slopes = value.copy(), [slope.copy() for slope in slopes]
    step = np.zeros_like(theta)
    step[0] = 1e-4
    around = [form.evaluate(theta + sign * step, clock)[0].copy() for sign in (-1, 1)]
    numerical = (around[0] - 2.0 * value + around[1]) / step[0] ** 2
    bend = form.bend(theta, value, slopes, log=False)
    np.testing.assert_allclose(bend[1:, [0, 2]], numerical[1:, [0, 2]], rtol=0.02)
    np.testing.assert_allclose(bend[0], 0.0, atol=1e-6)


def test_time_to_inverts_value(law_name: str, lead: np.ndarray, draw: Draw) -> None:
    law = LAWS[law_name]
    p = draw(law_name, 20)
    for column in (3, 17, 40):
        size = law.value(p, lead)[:, column]
        np.testing.assert_allclose(law.time_to(p, size), lead[column], rtol=1e-6)
    np.testing.assert_array_equal(law.time_to(p, 0.5 * p[:, 0]), 0.0)
    assert np.isnan(law.time_to(np.full_like(p[:1], np.nan), 1.0)).all()


def test_rates_and_doubling_times(law_name: str, draw: Draw) -> None:
    law = LAWS[law_name]
    p = draw(law_name, 10)
    size = 1.3 * p[:, 0]
    expected = np.array([speed(law_name, q, s) / s for q, s in zip(p, size, strict=True)])
    np.testing.assert_allclose(law.growth_rate(p, size), expected, rtol=1e-12)
    spent = law.time_to(p, 2.0 * size) - law.time_to(p, size)
    np.testing.assert_allclose(law.doubling_time(p, size), spent, rtol=1e-9)
    np.testing.assert_allclose(
        law.time_between(p, 2.0 * size, size), -law.time_between(p, size, 2.0 * size)
    )
    if law_name != "power":
        np.testing.assert_allclose(law.doubling_time(p) * law.growth_rate(p), np.log(2.0))
        assert (law.growth_rate(p) == p[:, 1]).all()


def test_sizes_beyond_saturation_are_never_reached(draw: Draw) -> None:
    for name in ("logistic", "logistic-source"):
        p = draw(name, 5)
        ceiling = LAWS[name].saturation(p)
        assert np.isinf(LAWS[name].time_to(p, 1.001 * ceiling)).all()
        assert np.isinf(LAWS[name].doubling_time(p, 0.6 * ceiling)).all()
    falling = np.array([[1.0, -0.1]])
    assert np.isinf(LAWS["exponential"].time_to(falling, 2.0)).all()
    assert np.isinf(LAWS["exponential"].doubling_time(falling)).all()


def test_limits_of_the_laws(lead: np.ndarray) -> None:
    source, logistic, power = LAWS["logistic-source"], LAWS["logistic"], LAWS["power"]
    # S = 0: the logistic law in V, with rate a.
    without = source.value(np.array([[0.1, 0.03, 0.0, 1.5]]), lead) ** 2
    plain = logistic.value(np.array([[0.01, 0.06, 2.25]]), lead)
    np.testing.assert_allclose(without, plain, rtol=1e-12)
    # a = 0: V = Vs - (Vs - V0) exp(-S t/Vs).
    relaxing = source.value(np.array([[0.1, 0.0, 0.02, 1.5]]), lead) ** 2
    np.testing.assert_allclose(
        relaxing[0], 2.25 - (2.25 - 0.01) * np.exp(-0.02 * lead / 2.25), rtol=1e-12
    )
    # a = 0 and no saturation: V0 + S t.
    drifting = source.value(np.array([[0.1, 0.0, 0.02, np.inf]]), lead) ** 2
    np.testing.assert_allclose(drifting[0], 0.01 + 0.02 * lead, rtol=1e-12)
    # No saturation: the exponential law.
    free = logistic.value(np.array([[0.1, 0.02, np.inf]]), lead)
    np.testing.assert_allclose(free[0], 0.1 * np.exp(0.02 * lead), rtol=1e-12)
    # A perfect start has a horizon: T0(A) = A^p/(c p).
    np.testing.assert_allclose(
        power.time_to(np.array([[0.0, 0.3, 0.6]]), 2.0), 2.0**0.6 / (0.3 * 0.6), rtol=1e-12
    )


def test_gain_in_initial_error(draw: Draw) -> None:
    """Common practice: a gain of k in initial error buys ln k / lambda, whatever the tolerance."""
    law = LAWS["exponential"]
    start = np.array([[5.0, 0.9], [0.005, 0.9]])
    near, far = law.time_to(start, 500.0)
    assert far / near == pytest.approx(2.5)
    assert law.value(np.array([[1.0, 0.9]]), np.array([10.0]))[0, 0] > 8000
    gained = [np.diff(law.time_to(start, size))[0] for size in (10.0, 100.0, 500.0)]
    np.testing.assert_allclose(gained, np.log(1000.0) / 0.9)


def test_clock_refuses_leads_that_do_not_increase() -> None:
    for bad in ([0.0, 6.0, 6.0], [-6.0, 0.0, 6.0], [0.0]):
        with pytest.raises(ArgumentError, match="lead"):
            Clock(np.array(bad))


def test_clock_powers(lead: np.ndarray) -> None:
    rate = np.array([0.0, 1e-6, 0.3, 40.0, -2.0])
    for times in (lead, np.array([3.0, 6.0, 9.0, 15.0, 21.0, 27.0, 33.0, 39.0, 45.0, 51.0])):
        clock = Clock(times)
        exponent = -rate * times[:, None] / times[-1]
        np.testing.assert_allclose(clock.decay(rate), np.exp(exponent), rtol=1e-13)
        np.testing.assert_allclose(clock.decay_minus_one(rate), np.expm1(exponent), rtol=1e-12)
