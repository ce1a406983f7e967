"""The symplectic scheme: its order, what it keeps, and its derivative."""

from typing import ClassVar

import numpy as np
import pytest

from ensemble_horizon import toys
from ensemble_horizon.errors import ArgumentError
from ensemble_horizon.toys.schemes import DRIFTS, KICKS

PERIOD = 2.0 * np.pi
GRAVITATING = ("two-body", "figure-eight", "compact-planets")


class PairByRungeKutta(toys.TwoBody):
    """The same two bodies, not split."""

    scheme: ClassVar[str] = "runge-kutta"


class LorenzToBeSplit(toys.Lorenz63):
    """A system that is none of positions and velocities."""

    scheme: ClassVar[str] = "symplectic"


@pytest.fixture(params=GRAVITATING)
def system(request):
    return toys.system(request.param)


def symplectic_form(system):
    """The matrix that pairs each dx with the momentum m dv of the same body."""
    masses = np.tile(system.masses, system.dimensions)
    return np.kron([[0.0, 1.0], [-1.0, 0.0]], np.diag(masses))


def test_coefficients_are_consistent_and_a_palindrome():
    # Blanes and Moan 2002: seven drifts and six kicks, each a whole step together.
    assert (len(DRIFTS), len(KICKS)) == (7, 6)
    assert sum(DRIFTS) == pytest.approx(1.0, abs=1e-15)
    assert sum(KICKS) == pytest.approx(1.0, abs=1e-15)
    assert list(reversed(DRIFTS)) == list(DRIFTS)
    assert list(reversed(KICKS)) == list(KICKS)


def test_coefficients_meet_the_conditions_of_order_four():
    # On the linear oscillator a step is exp of a 2 x 2 matrix: the defect must begin at dt^5.
    defects = []
    for dt in (0.4, 0.2):
        step = np.eye(2)
        for drift, kick in zip(DRIFTS, (*KICKS, 0.0), strict=True):
            step = np.array([[1.0, drift * dt], [0.0, 1.0]]) @ step
            step = np.array([[1.0, 0.0], [-kick * dt, 1.0]]) @ step
        exact = [[np.cos(dt), np.sin(dt)], [-np.sin(dt), np.cos(dt)]]
        defects.append(np.abs(step - exact).max())
    assert np.log2(defects[0] / defects[1]) > 4.9


def test_order_four_on_a_kepler_orbit():
    pair = toys.TwoBody(eccentricity=0.5)
    start = pair.default_state()
    errors = [
        np.linalg.norm(toys.integrate(pair, start, n, PERIOD / n, every=n).states[-1] - start)
        for n in (80, 160, 320)
    ]
    assert np.log2(errors[1] / errors[2]) == pytest.approx(4.0, abs=0.1)
    assert np.log2(errors[0] / errors[1]) == pytest.approx(4.0, abs=0.3)


def energy_errors(pair, steps_an_orbit, orbits=36):
    """Largest relative error of the energy within each of six equal parts of a run."""
    start = pair.default_state()
    run = toys.march(pair, start, orbits * steps_an_orbit, PERIOD / steps_an_orbit)
    energy = np.array([pair.energy(state) for state in run])
    return np.abs(energy[1:] / energy[0] - 1.0).reshape(6, -1).max(axis=1)


def test_energy_stays_where_runge_kutta_drifts_at_equal_work():
    # Six forces a step against four.
    symplectic = energy_errors(toys.TwoBody(), 30)
    kutta = energy_errors(PairByRungeKutta(), 45)
    assert symplectic.max() / symplectic.min() < 1.02
    assert kutta[-1] / kutta[0] == pytest.approx(6.0, rel=0.1)
    assert symplectic[-1] < 0.05 * kutta[-1]


def test_angular_momentum_and_momentum_are_kept_to_rounding(system):
    start = toys.perturb(system, system.default_state(), 4, amplitude=1e-3, seed=2)
    end = toys.integrate(system, start, 1000, every=1000).states[-1]
    before = system.angular_momentum(start)
    # The angular momentum of the figure eight is 0: hold it against the bodies' own.
    r, v = (system._by_axis(part) for part in system.split(start))
    scale = (np.linalg.norm(r, axis=-2) * np.linalg.norm(v, axis=-2)) @ np.array(system.masses)
    assert np.abs(system.angular_momentum(end) - before).max() < 1e-12 * scale.max()
    place, velocity = system.centre_of_mass(start)
    later, still = system.centre_of_mass(end)
    speed = np.abs(system.split(start)[1]).max()
    assert still == pytest.approx(velocity, abs=1e-12 * speed)
    span = 1000 * system.step
    assert later == pytest.approx(place + span * velocity, abs=1e-12 * span * speed)


def test_tangent_map_is_symplectic(system):
    states = np.broadcast_to(system.default_state(), (system.size, system.size))
    moved = np.eye(system.size)
    for _ in range(10):
        states, moved = toys.tangent_step(system, states, moved, system.step)
    omega = symplectic_form(system)
    # Rows of ``moved`` are images of the unit vectors: J^T omega J.
    kept = moved @ omega @ moved.T
    assert kept == pytest.approx(omega, abs=1e-12 * np.abs(moved).max() ** 2 * omega.max())


def test_tangent_map_of_runge_kutta_is_not_symplectic():
    pair = PairByRungeKutta()
    states = np.broadcast_to(pair.default_state(), (8, 8))
    _, moved = toys.tangent_step(pair, states, np.eye(8), 0.2)
    omega = symplectic_form(pair)
    assert np.abs(moved @ omega @ moved.T - omega).max() > 1e-6


def test_a_run_back_undoes_the_run_forth(system):
    start = system.default_state()
    there = toys.integrate(system, start, 200, every=200).states[-1]
    positions, velocities = system.split(there)
    turned = np.concatenate([positions, -velocities])
    back = toys.integrate(system, turned, 200, every=200).states[-1]
    positions, velocities = system.split(back)
    home = np.concatenate([positions, -velocities])
    assert np.abs(there - start).max() > 0.1 * np.abs(start).max()
    assert home == pytest.approx(start, abs=1e-11 * np.abs(start).max())


def test_one_displacement_of_many_states_and_the_reverse():
    eight = toys.FigureEight()
    start = eight.default_state()
    many = toys.perturb(eight, start, 3, amplitude=0.01, seed=4)
    moved = np.random.default_rng(5).standard_normal(many.shape)
    _, of_each = toys.tangent_step(eight, many, moved[0], 0.05)
    _, of_one = toys.tangent_step(eight, start, moved, 0.05)
    for state, displacement, found in (
        (many[2], moved[0], of_each[2]),
        (start, moved[2], of_one[2]),
    ):
        _, alone = toys.tangent_step(eight, state, displacement, 0.05)
        assert found == pytest.approx(alone, abs=1e-14)


@pytest.mark.parametrize("tangent", [False, True])
def test_a_system_that_does_not_split_is_refused(tangent):
    lorenz = LorenzToBeSplit()
    state = lorenz.default_state()
    with pytest.raises(ArgumentError, match=r"scheme of lorenz-63: expected .*SplitSystem") as told:
        if tangent:
            toys.tangent_step(lorenz, state, state, 0.01)
        else:
            toys.integrate(lorenz, state, 10)
    assert told.value.remedy == "set scheme = 'runge-kutta'"
