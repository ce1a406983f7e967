"""One contract for every system of the registry."""

import functools
import pickle

import numpy as np
import pytest
from scipy.integrate import solve_ivp

from ensemble_horizon import toys
from ensemble_horizon.errors import ArgumentError

NAMES = sorted(toys.SYSTEMS)


@pytest.fixture(params=NAMES)
def system(request):
    return toys.system(request.param)


@pytest.fixture
def settled(system):
    """Three states on or near the attractor."""
    return settled_states(system).copy()


@functools.cache
def settled_states(system):
    initial = toys.perturb(
        system, system.default_state(), 3, amplitude=0.1 * size_of(system), seed=11
    )
    return toys.integrate(system, initial, 200, every=200).states[-1]


def size_of(system):
    return float(np.linalg.norm(system.default_state()))


def published(quantity):
    return [
        pytest.param(name, value, id=f"{name}-{value.value}")
        for name in NAMES
        for value in toys.SYSTEMS[name].published
        if value.quantity == quantity
    ]


def test_describes_itself(system):
    assert toys.SYSTEMS[system.name] is type(system)
    assert system.title
    assert system.source
    assert system.step > 0
    assert len(set(system.variables)) == system.size
    for entry in system.parameters.values():
        assert entry.units
        assert entry.meaning
    state = system.default_state()
    assert state.shape == (system.size,)
    assert np.all(np.isfinite(state))
    assert pickle.loads(pickle.dumps(system)) == system


def test_works_on_any_leading_axes(system, settled):
    block = np.stack([settled, 0.9 * settled])
    one_by_one = [[system.tendency(state) for state in row] for row in block]
    scale = np.abs(one_by_one).max()
    assert system.tendency(block) == pytest.approx(np.array(one_by_one), abs=1e-12 * scale)
    assert system.jacobian(block).shape == (2, 3, system.size, system.size)
    assert system.jacobian(block)[1, 2] == pytest.approx(
        system.jacobian(block[1, 2]), abs=1e-12 * np.abs(system.jacobian(block)).max()
    )


def test_jacobian_is_the_derivative_of_the_tendency(system, settled):
    # All tendencies here are quadratic at most, and central differences are exact for those.
    state = settled[0]
    step = 1e-3 * size_of(system)
    columns = [
        (system.tendency(state + step * unit) - system.tendency(state - step * unit)) / (2 * step)
        for unit in np.eye(system.size)
    ]
    exact = system.jacobian(state)
    assert exact == pytest.approx(np.array(columns).T, abs=1e-9 * np.abs(exact).max())


def test_tangent_is_the_jacobian_applied(system, settled):
    random = np.random.default_rng(4)
    moved = random.standard_normal((3, 5, system.size))
    applied = system.tangent(settled[:, None], moved)
    expected = np.einsum("bij,bkj->bki", system.jacobian(settled), moved)
    assert applied == pytest.approx(expected, abs=1e-11 * np.abs(expected).max())


def test_tangent_step_is_the_derivative_of_the_step(system, settled):
    direction = np.random.default_rng(5).standard_normal(settled.shape)
    later, moved = toys.tangent_step(system, settled, direction, system.step)
    assert np.array_equal(later, toys.step(system, settled, system.step))
    small = 1e-4 * size_of(system)
    ahead = toys.step(system, settled + small * direction, system.step)
    back = toys.step(system, settled - small * direction, system.step)
    assert moved == pytest.approx((ahead - back) / (2 * small), abs=1e-6 * np.abs(moved).max())


def test_runge_kutta_converges_with_order_four(system, settled):
    # Reference: scipy's DOP853 (Dormand and Prince, order 8) at tight tolerance.
    length = 16 * system.step
    state = settled[0]
    reference = solve_ivp(
        lambda _, x: system.tendency(x),
        (0.0, length),
        state,
        method="DOP853",
        rtol=1e-12,
        atol=1e-13 * size_of(system),
    ).y[:, -1]
    errors = []
    for halving in (0, 1, 2):
        steps = 4 * 2**halving
        run = toys.integrate(system, state, steps, length / steps, every=steps)
        errors.append(np.linalg.norm(run.states[-1] - reference))
    orders = np.log2(np.array(errors[:-1]) / errors[1:])
    assert orders[-1] == pytest.approx(4.0, abs=0.35)


@pytest.mark.parametrize(("name", "value"), published("sum_of_exponents"))
def test_mean_divergence_as_published(name, value):
    system = toys.system(name, **dict(value.parameters))
    states = np.random.default_rng(6).standard_normal((4, system.size))
    trace = np.trace(system.jacobian(states), axis1=-2, axis2=-1)
    assert trace == pytest.approx(value.value, abs=value.tolerance)


@pytest.mark.parametrize(("name", "value"), published("leading_exponent"))
def test_leading_exponent_as_published(name, value):
    # Benettin et al. 1980: mean logarithmic growth of a tangent vector, rescaled as it goes.
    system = toys.system(name, **dict(value.parameters))
    members = 1600 // system.size
    start = toys.perturb(system, system.default_state(), members, amplitude=1.0, seed=7)
    dt = system.step
    settled = round(20 / dt)
    states = toys.integrate(system, start, settled, dt, every=settled).states[-1]
    vectors = np.random.default_rng(8).standard_normal(states.shape)
    total, counted = 0.0, 0
    every, blocks, skipped = round(0.5 / dt), 24, 8
    for block in range(blocks):
        for _ in range(every):
            states, vectors = toys.tangent_step(system, states, vectors, dt)
        length = np.linalg.norm(vectors, axis=-1, keepdims=True)
        vectors = vectors / length
        if block >= skipped:
            total, counted = total + np.log(length).mean(), counted + 1
    assert total / (counted * every * dt) == pytest.approx(value.value, abs=value.tolerance)


def test_same_seed_gives_the_same_run(system):
    def run(seed):
        initial = toys.perturb(
            system, system.default_state(), 2, amplitude=0.01 * size_of(system), seed=seed
        )
        return toys.integrate(system, initial, 20).states

    assert np.array_equal(run(3), run(3))
    assert not np.array_equal(run(3), run(4))


def test_every_parameter_is_checked(system):
    for name in system.parameters:
        with pytest.raises(ArgumentError, match=f"{system.name}: {name}: expected a .* number"):
            toys.system(system.name, **{name: float("nan")})
    with pytest.raises(ArgumentError, match=f"parameter of {system.name}: expected one of"):
        toys.system(system.name, colour=1.0)


def test_unknown_system_names_the_nearest():
    with pytest.raises(ArgumentError, match="did you mean 'two-layer-channel'"):
        toys.system("two-layer-chanel")


def test_bounds_and_whole_numbers_are_kept():
    with pytest.raises(ArgumentError, match=r"above 0 .Prandtl number, units 1.; found -1"):
        toys.system("lorenz-63", sigma=-1.0)
    with pytest.raises(ArgumentError, match="whole number of at least 4"):
        toys.system("lorenz-96", sites=40.5)
