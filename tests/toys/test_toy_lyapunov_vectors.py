"""Backward Lyapunov vectors: orthonormal, covariant with the run, growing at the exponents."""

import numpy as np
import pytest
from perturbation_cases import CHANNEL, RING, past_and_now

from ensemble_horizon import toys
from ensemble_horizon.errors import ArgumentError

LORENZ = toys.system("lorenz-63")


def test_one_cycle_growth_gives_the_exponents():
    published = next(v for v in LORENZ.published if v.quantity == "exponents")
    disturbed = toys.perturb(LORENZ, LORENZ.default_state(), 200, amplitude=1.0, seed=8)
    states, vectors = toys.lyapunov_vectors(LORENZ, toys.settled(LORENZ, disturbed), 3, 20.0)
    cycle, cycles, logs = 25, 40, []
    for _ in range(cycles):
        states = states[:, None]
        for _ in range(cycle):
            states, vectors = toys.tangent_step(LORENZ, states, vectors, LORENZ.step)
        states = states[:, 0]
        # The volumes that the first k vectors span grow at the sum of k exponents.
        q, r = np.linalg.qr(np.swapaxes(vectors, -1, -2))
        vectors = np.swapaxes(q, -1, -2)
        logs.append(np.log(np.abs(np.diagonal(r, axis1=-2, axis2=-1))))
    rates = np.mean(logs, axis=0) / (cycle * LORENZ.step)
    error = rates.std(axis=0, ddof=1) / np.sqrt(200)
    assert np.all(3 * error < 0.04)
    distance = np.abs(rates.mean(axis=0) - published.value)
    assert np.all(distance < published.tolerance + 3 * error)
    # The divergence is the same everywhere, so it holds for every start, but for the scheme.
    assert rates.sum(axis=-1) == pytest.approx(np.full(200, -41 / 3), abs=1e-3)


@pytest.mark.parametrize("norm", ["euclidean", "area-weighted", "total-energy"])
def test_orthonormal_in_the_chosen_norm(norm):
    past, now = past_and_now("two-layer-channel")
    found = toys.lyapunov_vectors(CHANNEL, past, 12, 0.5, norm)
    flat = CHANNEL.norms()[norm].flatten(found.vectors)
    assert flat @ flat.T == pytest.approx(np.eye(12), abs=1e-12)
    assert found.control == pytest.approx(now, rel=1e-9)
    largest = np.argmax(np.abs(found.vectors), axis=-1)
    assert np.all(np.take_along_axis(found.vectors, largest[:, None], axis=-1) > 0)


def test_the_seed_is_forgotten_and_the_run_carries_them_along():
    past = toys.settled(LORENZ)
    now = toys.integrate(LORENZ, past, 1000, every=1000).states[-1]
    one = toys.lyapunov_vectors(LORENZ, now, 3, 20.0, seed=1)
    other = toys.lyapunov_vectors(LORENZ, past, 3, 30.0, seed=2)
    assert np.array_equal(one.control, other.control)
    assert one.vectors == pytest.approx(other.vectors, abs=1e-5)


def test_fewer_vectors_are_the_first_of_more():
    past, _ = past_and_now("lorenz-96")
    few = toys.lyapunov_vectors(RING, past, 3, 4.0, seed=1).vectors
    many = toys.lyapunov_vectors(RING, past, 9, 4.0, seed=1).vectors
    assert few == pytest.approx(many[:3], abs=1e-8)


def test_every_vector_may_be_a_member():
    past, now = past_and_now("lorenz-96")
    chosen = {"seed": 1, "method": "backward-lyapunov-vectors", "past": past, "span": 4.0}
    members = toys.perturb(RING, now, 80, amplitude=0.5, paired=True, **chosen)
    moved = members[::2] - now
    assert moved @ moved.T == pytest.approx(0.25 * np.eye(40), abs=1e-12)


@pytest.mark.parametrize(
    ("change", "message"),
    [
        ({"past": None}, "past: expected the control at time -4"),
        ({"span": None}, "span: expected the length of the run up to the start; found nothing"),
        ({"span": 4.01}, "span: expected a multiple of the time step 0.05; found 4.01"),
        ({"span": 2.0}, "past: expected a state that leads to the control in a time of 2"),
        ({"members": 41}, "members: expected at most the 40 variables of lorenz-96; found 41"),
        ({"count": 41}, "count: expected at most the 40 variables of lorenz-96; found 41"),
        ({"count": 1}, "count: expected a whole number of at least 2"),
        ({"dt": 0.0}, "dt: expected a finite number above zero"),
    ],
)
def test_wrong_options_are_refused(change, message):
    past, now = past_and_now("lorenz-96")
    arguments = {"past": past, "span": 4.0, "members": 2, "amplitude": 0.1, "seed": 1}
    with pytest.raises(ArgumentError, match=message):
        toys.perturb(RING, now, method="backward-lyapunov-vectors", **arguments | change)


def test_more_vectors_than_variables_are_refused():
    with pytest.raises(ArgumentError, match=r"count: expected at most the 3 variables .* found 4"):
        toys.lyapunov_vectors(LORENZ, LORENZ.default_state(), 4, 1.0)


def test_a_run_that_overflows_is_told():
    with pytest.raises(ArgumentError, match=r"tangent run of lorenz-63: expected finite .*time"):
        toys.lyapunov_vectors(LORENZ, [1e3, 1e3, 1e3], 2, 100.0, dt=1.0)
