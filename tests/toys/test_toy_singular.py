"""Singular vectors: against the matrix exponential, and against all that may grow faster."""

from dataclasses import dataclass
from typing import ClassVar

import numpy as np
import pytest
import scipy.linalg
from perturbation_cases import CHANNEL, FLOATS, RING, carried, past_and_now

from ensemble_horizon import toys
from ensemble_horizon.errors import ArgumentError
from ensemble_horizon.toys.norms import scaled

MATRIX = np.random.default_rng(12).standard_normal((6, 6)) + 4 * np.eye(6, k=1)
FACTOR = np.array([1.0, 2.0, 0.5, 3.0, 1.0, 0.2])


@dataclass(frozen=True)
class Linear(toys.System):
    """dx/dt = A x, far from normal, so that growth over a time is not that of an eigenvalue."""

    name: ClassVar[str] = "linear"
    title: ClassVar[str] = "linear"
    source: ClassVar[str] = "linear algebra"
    step: ClassVar[float] = 0.005
    variables = tuple("abcdef")

    def default_state(self):
        return np.ones(6)

    def tendency(self, state, time=0.0):
        return np.asarray(state) @ MATRIX.T

    def jacobian(self, state, time=0.0):
        return np.broadcast_to(MATRIX, (*np.shape(state)[:-1], 6, 6))

    def norms(self):
        return {**super().norms(), "weighted": scaled("weighted", "1", "test", FACTOR)}


@pytest.mark.parametrize(("norm", "factor"), [("euclidean", np.ones(6)), ("weighted", FACTOR)])
def test_linear_system_against_the_matrix_exponential(norm, factor):
    found = toys.singular_vectors(Linear(), np.ones(6), 0.4, 6, norm)
    propagator = factor[:, None] * scipy.linalg.expm(0.4 * MATRIX) / factor
    _, growth, rows = scipy.linalg.svd(propagator)
    assert found.growth == pytest.approx(growth, rel=1e-7)
    cosine = np.sum(found.vectors * factor * rows, axis=-1)
    assert np.abs(cosine) == pytest.approx(np.ones(6), abs=1e-9)


def test_spiral_sink_shrinks_all_alike():
    sink = toys.system("spiral-sink", decay=0.2, rotation=3.0)
    found = toys.singular_vectors(sink, [1.0, 0.0], 1.5, 2, dt=0.01)
    assert found.growth == pytest.approx(np.full(2, np.exp(-0.3)), rel=1e-6)


def test_volume_of_lorenz_63_shrinks_at_its_divergence():
    lorenz = toys.system("lorenz-63")
    growth = toys.singular_vectors(lorenz, toys.settled(lorenz), 0.5, 3).growth
    assert np.log(growth).sum() == pytest.approx(-41 / 3 * 0.5, abs=1e-4)


def contenders(norm, amplitude):
    """Displacements of many kinds about the later state of the ring."""
    past, now = past_and_now("lorenz-96")
    chosen = {"amplitude": amplitude, "seed": 6, "norm": norm}
    past_run = {"past": past, "cycle": 0.5, "cycles": 8}
    ways = [
        {"members": 200},
        {"members": 100, "method": "correlated", "length": 3.0},
        {"members": 20, "method": "bred-vectors", **past_run},
        {"members": 40, "method": "backward-lyapunov-vectors", "past": past, "span": 4.0},
        {"members": 50, "method": "singular-vectors", "window": 0.5, "count": 8},
    ]
    return np.concatenate([toys.perturb(RING, now, **way, **chosen) - now for way in ways])


@pytest.mark.parametrize("window", [0.25, 1.0])
def test_no_perturbation_outgrows_the_leading_one(window):
    _, now = past_and_now("lorenz-96")
    leading = toys.singular_vectors(RING, now, window, 1)
    moved = np.concatenate([leading.vectors, contenders("euclidean", 1.0)])
    later = carried(RING, now, moved, round(window / RING.step))
    growth = np.linalg.norm(later, axis=-1) / np.linalg.norm(moved, axis=-1)
    assert growth[0] == pytest.approx(leading.growth[0], rel=1e-10)
    assert growth[1:].max() <= leading.growth[0] * (1 + 1e-10)
    assert growth[1:].max() > 0.3 * leading.growth[0]


def test_small_finite_perturbations_do_not_outgrow_it_either():
    _, now = past_and_now("lorenz-96")
    window, amplitude = 0.5, 1e-4
    leading = toys.singular_vectors(RING, now, window, 1)
    moved = np.concatenate([amplitude * leading.vectors, contenders("euclidean", amplitude)])
    steps = round(window / RING.step)
    run = toys.integrate(RING, np.concatenate([now[None], now + moved]), steps, every=steps)
    later = run.states[-1]
    growth = np.linalg.norm(later[1:] - later[0], axis=-1) / amplitude
    assert growth[0] == pytest.approx(leading.growth[0], rel=0.01)
    assert growth.max() <= 1.01 * leading.growth[0]


def test_orthogonal_at_both_ends_in_total_energy():
    _, now = past_and_now("two-layer-channel")
    norm = CHANNEL.norms()["total-energy"]
    found = toys.singular_vectors(CHANNEL, now, 1.0, 12, "total-energy")
    first = norm.flatten(found.vectors)
    assert first @ first.T == pytest.approx(np.eye(12), abs=1e-12)
    last = norm.flatten(carried(CHANNEL, now, found.vectors, 24))
    assert last @ last.T == pytest.approx(np.diag(found.growth**2), abs=1e-10)


def test_driven_systems_grow_at_their_own_time():
    # Central differences of the full run, at two phases of the driving.
    state, window, steps = FLOATS.default_state(), 3.0, 72
    for time in (0.0, 2.5):
        found = toys.singular_vectors(FLOATS, state, window, 1, time=time)
        pair = state + np.array([[10.0], [-10.0]]) * found.vectors
        ahead, back = toys.integrate(FLOATS, pair, steps, every=steps, time=time).states[-1]
        assert np.linalg.norm(ahead - back) / 20 == pytest.approx(found.growth[0], rel=1e-4)


def test_columns_in_several_chunks():
    # A ring of 140 sites takes two chunks of columns; the tangent linear run must agree.
    ring = toys.system("lorenz-96", sites=140)
    now = toys.settled(ring)
    found = toys.singular_vectors(ring, now, 0.2, 3)
    later = carried(ring, now, found.vectors, 4)
    assert np.linalg.norm(later, axis=-1) == pytest.approx(found.growth, rel=1e-10)


@pytest.mark.parametrize(
    ("change", "message"),
    [
        ({"window": None}, "window: expected the time over which growth is counted; found nothing"),
        ({"window": 0.12}, "window: expected a multiple of the time step 0.05; found 0.12"),
        ({"window": -1.0}, "window: expected a finite number above zero"),
        ({"members": 41}, "members: expected at most the 40 variables of lorenz-96; found 41"),
        ({"members": 84, "paired": True}, "members: expected at most the 40 .* found 42"),
        ({"count": 41}, "count: expected at most the 40 variables of lorenz-96; found 41"),
        ({"windw": 1.0}, "option of singular-vectors: .* did you mean 'window'"),
    ],
)
def test_wrong_options_are_refused(change, message):
    _, now = past_and_now("lorenz-96")
    arguments = {"window": 0.5, "members": 2, "amplitude": 0.1, "seed": 1}
    with pytest.raises(ArgumentError, match=message):
        toys.perturb(RING, now, method="singular-vectors", **arguments | change)


def test_more_vectors_than_variables_are_refused():
    with pytest.raises(
        ArgumentError, match=r"count: expected at most the 40 variables .* found 41"
    ):
        toys.singular_vectors(RING, RING.default_state(), 0.5, 41)
    with pytest.raises(ArgumentError, match="state: expected one state of 40 variables"):
        toys.singular_vectors(RING, np.ones((2, 40)), 0.5, 1)


def test_large_systems_are_sent_to_breeding():
    ring = toys.system("lorenz-96", sites=1501)
    with pytest.raises(ArgumentError, match=r"at most 1500 variables; found 1501.*bred-vectors"):
        toys.singular_vectors(ring, ring.default_state(), 0.05, 1)
