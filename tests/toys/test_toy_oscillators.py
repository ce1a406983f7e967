"""van der Pol's and Rossler's systems against scipy's adaptive solvers."""

import numpy as np
import pytest
from scipy.integrate import solve_ivp

from ensemble_horizon import toys


def published(name, quantity):
    return next(v for v in toys.SYSTEMS[name].published if v.quantity == quantity)


@pytest.fixture(scope="module")
def orbit():
    """One turn of the van der Pol orbit by scipy, from crossing to crossing of y = 0 downward."""

    def crossing(_, state):
        return state[1]

    def law(_, state):
        x, y = state[:2]
        # The third variable adds up the divergence of the flow along the orbit.
        return [y, (1 - x**2) * y - x, 1 - x**2]

    crossing.direction = -1
    return solve_ivp(
        law, (0, 80), [2.0, 0.1, 0.0], "DOP853", rtol=1e-12, atol=1e-13, events=crossing
    )


def test_period_of_van_der_pol_by_event_finding(orbit):
    value = published("van-der-pol", "period")
    periods = np.diff(orbit.t_events[0])[-3:]
    assert periods == pytest.approx(np.full(3, value.value), abs=value.tolerance)


def test_period_of_van_der_pol_by_the_project_itself():
    value = published("van-der-pol", "period")
    system = toys.system("van-der-pol")
    run = toys.integrate(system, toys.settled(system), 2000)
    x, y = run.states.T
    before = np.flatnonzero((y[:-1] > 0) & (y[1:] <= 0))
    # Inverse cubic through four points: y runs straight through zero there.
    times = [
        np.polyval(np.polyfit(y[i - 1 : i + 3], run.times[i - 1 : i + 3], 3), 0.0) for i in before
    ]
    assert np.diff(times) == pytest.approx(np.full(len(times) - 1, value.value), abs=2e-5)
    # The amplitude for mu = 1 as told in texts on nonlinear oscillations (from memory).
    assert x.max() == pytest.approx(2.00862, abs=2e-4)


def test_second_exponent_of_van_der_pol_is_the_mean_divergence(orbit):
    # The sum of the exponents is the mean of the divergence, and the one along the orbit is zero.
    value = published("van-der-pol", "exponents")
    crossings = orbit.y_events[0][-2:, 2]
    turn = np.diff(orbit.t_events[0])[-1]
    assert np.diff(crossings)[0] / turn == pytest.approx(value.value[1], abs=2e-3)


def test_small_van_der_pol_oscillation_has_amplitude_two():
    # Weak damping: x = 2 cos t to first order in mu (averaging; van der Pol 1926).
    system = toys.system("van-der-pol", mu=0.01)
    run = toys.integrate(system, [0.5, 0.0], 10000, 0.1, every=10)
    late = run.states[run.times > 900]
    assert np.linalg.norm(late, axis=-1) == pytest.approx(np.full(len(late), 2.0), abs=0.02)


def test_rossler_rests_at_its_fixed_points():
    # z = x / a, y = -z and a z^2 - c z + b = 0 (closed form; Rossler 1976).
    system = toys.system("rossler")
    root = np.sqrt(system.c**2 - 4 * system.a * system.b)
    for z in ((system.c + root) / (2 * system.a), (system.c - root) / (2 * system.a)):
        assert np.abs(system.tendency([system.a * z, -z, z])).max() < 1e-12


def test_rossler_doubles_its_period_on_the_way_to_chaos():
    # With a = b = 0.2 the orbit closes after one turn at c = 2.5, after two at c = 3.5
    # (Rossler's period doubling as told in textbooks, from memory).
    for c, turns in ((2.5, 1), (3.5, 2)):
        system = toys.system("rossler", c=c)
        start = toys.integrate(system, system.default_state(), 7500, every=7500).states[-1]
        run = toys.integrate(system, start, 2000)
        x = run.states[:, 0]
        peaks = x[1:-1][(x[1:-1] > x[:-2]) & (x[1:-1] > x[2:])]
        assert np.abs(peaks[turns:] - peaks[:-turns]).max() < 0.02
        if turns == 2:
            assert np.abs(np.diff(peaks)).min() > 0.5
