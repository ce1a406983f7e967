"""One contract for every system of the registry."""

import functools
import pickle

import numpy as np
import pytest
from scipy.integrate import solve_ivp

from ensemble_horizon import toys
from ensemble_horizon.errors import ArgumentError

NAMES = sorted(toys.SYSTEMS)
# Autonomous systems must not care; one driven from outside must be right at any time.
TIMES = (0.0, 2.3, 7.9)
# How far from the default state the contract looks, in parts of its size: a tenth, but that sends
# the three bodies of the figure eight apart, and far apart they hardly accelerate.
SCATTER = {"figure-eight": 0.01}


@pytest.fixture(params=NAMES)
def system(request):
    return toys.system(request.param)


@pytest.fixture
def settled(system):
    """Three states on or near the attractor."""
    return settled_states(system).copy()


@functools.cache
def settled_states(system):
    amplitude = SCATTER.get(system.name, 0.1) * size_of(system)
    initial = toys.perturb(system, system.default_state(), 3, amplitude=amplitude, seed=11)
    return toys.integrate(system, initial, 200, every=200).states[-1]


def size_of(system):
    return float(np.linalg.norm(system.default_state()))


def assert_close(found, expected, share):
    """As pytest.approx with ``share`` of the largest value, but fast for large matrices."""
    assert found.shape == expected.shape
    assert np.abs(found - expected).max() <= share * np.abs(expected).max()


def derivative(function, state, direction, step):
    """Central differences at three steps, extrapolated twice: exact for polynomials of degree 6.

    Quadratic tendencies need no extrapolation; sines, cubes and inverse squares do.
    """
    rough, fine, finest = (
        (function(state + h * direction) - function(state - h * direction)) / (2 * h)
        for h in (step, step / 2, step / 4)
    )
    return (16 * (4 * finest - fine) - (4 * fine - rough)) / 45


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
    assert_close(system.jacobian(block)[1, 2], system.jacobian(block[1, 2]), 1e-12)


def test_times_broadcast_like_leading_axes(system, settled):
    moved = np.random.default_rng(9).standard_normal(settled.shape)
    for method, arguments in (
        ("tendency", (settled,)),
        ("jacobian", (settled,)),
        ("tangent", (settled, moved)),
    ):
        function = getattr(system, method)
        together = function(*arguments, time=np.array(TIMES))
        alone = np.stack(
            [function(*(a[i] for a in arguments), time=t) for i, t in enumerate(TIMES)]
        )
        assert_close(together, alone, 1e-12)


@pytest.mark.parametrize("time", TIMES)
def test_jacobian_is_the_derivative_of_the_tendency(system, settled, time):
    state = settled[0]
    step = 1e-3 * size_of(system)
    columns = [
        derivative(lambda x: system.tendency(x, time), state, unit, step)
        for unit in np.eye(system.size)
    ]
    assert_close(system.jacobian(state, time), np.array(columns).T, 1e-9)


@pytest.mark.parametrize("time", TIMES)
def test_tangent_is_the_jacobian_applied(system, settled, time):
    random = np.random.default_rng(4)
    moved = random.standard_normal((3, 5, system.size))
    applied = system.tangent(settled[:, None], moved, time)
    expected = np.einsum("bij,bkj->bki", system.jacobian(settled, time), moved)
    assert_close(applied, expected, 1e-11)
    one_displacement = system.tangent(settled, moved[0, 0], time)
    assert_close(one_displacement, system.jacobian(settled, time) @ moved[0, 0], 1e-11)


@pytest.mark.parametrize("time", TIMES)
def test_tangent_step_is_the_derivative_of_the_step(system, settled, time):
    direction = np.random.default_rng(5).standard_normal(settled.shape)
    later, moved = toys.tangent_step(system, settled, direction, system.step, time)
    assert np.array_equal(later, toys.step(system, settled, system.step, time))
    small = 1e-4 * size_of(system)
    expected = derivative(
        lambda x: toys.step(system, x, system.step, time), settled, direction, small
    )
    assert_close(moved, expected, 1e-6)


@pytest.mark.parametrize("time", TIMES)
def test_scheme_converges_with_its_order(system, settled, time):
    # Reference: scipy's DOP853 (Dormand and Prince, order 8) at tight tolerance.
    length = 16 * system.step
    state = settled[0]
    reference = solve_ivp(
        lambda t, x: system.tendency(x, t),
        (time, time + length),
        state,
        method="DOP853",
        rtol=1e-12,
        atol=1e-13 * size_of(system),
    ).y[:, -1]
    errors = []
    for halving in (0, 1, 2):
        steps = 4 * 2**halving
        run = toys.integrate(system, state, steps, length / steps, every=steps, time=time)
        errors.append(np.linalg.norm(run.states[-1] - reference))
    orders = np.log2(np.array(errors[:-1]) / errors[1:])
    assert orders[-1] == pytest.approx(toys.SCHEMES[system.scheme].order, abs=0.35)


@pytest.mark.parametrize(("name", "value"), published("sum_of_exponents"))
def test_mean_divergence_as_published(name, value):
    system = toys.system(name, **dict(value.parameters))
    states = np.random.default_rng(6).standard_normal((4, system.size))
    for time in TIMES:
        trace = np.trace(system.jacobian(states, time), axis1=-2, axis2=-1)
        assert trace == pytest.approx(value.value, abs=value.tolerance)


@pytest.mark.parametrize(("name", "value"), published("period"))
def test_orbit_closes_after_the_published_period(name, value):
    system = toys.system(name, **dict(value.parameters))
    start = toys.settled(system)
    steps = 20 * round(value.value / system.step)
    end = toys.integrate(system, start, steps, value.value / steps, every=steps).states[-1]
    late = end - start
    flow = system.tendency(start)
    # A wrong period shows along the flow; across it the orbit must close by itself.
    delay = late @ flow / (flow @ flow)
    assert abs(delay) <= value.tolerance
    assert np.linalg.norm(late - delay * flow) <= 0.1 * value.tolerance * np.linalg.norm(flow)


SETTLING = [toys.system(name) for name in NAMES if toys.SYSTEMS[name].spin_up > 0]
CHANNELS = [
    pytest.param(system, id=f"{system.name}-{system.size}", marks=pytest.mark.slow)
    for system in (toys.TwoLayerChannel(), toys.TwoLayerChannel(zonal_waves=3, meridional_modes=4))
]


@pytest.mark.parametrize(
    "system",
    [*(s for s in SETTLING if not isinstance(s, toys.TwoLayerChannel)), *CHANNELS],
    ids=lambda system: system.name,
)
def test_statistics_are_steady_after_the_spin_up(system):
    """The mean square of states does not differ between two windows after the spin-up."""
    members = max(6, min(64, 4000 // system.size))
    start = system.default_state()
    start = toys.perturb(system, start, members, amplitude=0.1 * size_of(system), seed=21)
    norms = system.norms()
    norm = norms.get("total-energy", norms["area-weighted"])
    # Whole turns of a closed orbit, so that its phase does not matter.
    turn = next((v.value for v in system.published if v.quantity == "period"), 1.0)
    dt = turn / round(turn / system.step)
    steps = round(np.ceil(system.spin_up / turn) * turn / dt)
    past, square = toys.settled(system, start), []
    for number, states in enumerate(toys.march(system, past, 2 * steps, dt)):
        if number:
            square.append(norm.length(states) ** 2)
    early, late = np.split(np.array(square), 2)
    change = late.mean(axis=0) - early.mean(axis=0)
    error = change.std(ddof=1) / np.sqrt(members)
    assert abs(change.mean()) < 3.5 * error + 1e-3 * late.mean()


def test_a_system_without_spin_up_has_no_attractor_of_its_own():
    # Where volumes in the space of states do not shrink there is nothing to settle on.
    for name in set(NAMES) - {system.name for system in SETTLING} - {"spiral-sink"}:
        system = toys.system(name)
        matrix = system.jacobian(system.default_state(), 1.7)
        assert abs(np.trace(matrix)) < 1e-12 * np.abs(matrix).sum(), name


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
