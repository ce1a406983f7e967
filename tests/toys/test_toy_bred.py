"""Bred vectors: their growth tends to the leading exponent, their direction to its vector."""

import functools

import numpy as np
import pytest
from perturbation_cases import FLOATS, RING, SPAN, TIME, options, past_and_now

from ensemble_horizon import toys
from ensemble_horizon.errors import ArgumentError

LORENZ = toys.system("lorenz-63")


@functools.cache
def many_starts(name, count):
    """States on the attractor, independent of each other."""
    system = toys.system(name)
    disturbed = toys.perturb(system, system.default_state(), count, amplitude=1.0, seed=21)
    return toys.settled(system, disturbed)


def leading_exponent(name):
    values = toys.SYSTEMS[name].published
    return next(v for v in values if v.quantity == "leading_exponent" and not v.parameters)


@pytest.mark.parametrize(("name", "starts"), [("lorenz-63", 200), ("lorenz-96", 200)])
def test_growth_tends_to_the_leading_exponent(name, starts):
    published = leading_exponent(name)
    bred = toys.bred_vectors(
        toys.system(name),
        many_starts(name, starts),
        1,
        amplitude=1e-6,
        cycle=0.5,
        cycles=80,
        seed=1,
    )
    # Each start is a sample of its own; the first half is left to find the direction.
    means = bred.rates[40:].mean(axis=(0, 2))
    error = means.std(ddof=1) / np.sqrt(starts)
    assert 3 * error < 0.05
    assert means.mean() == pytest.approx(published.value, abs=published.tolerance + 3 * error)


def test_spiral_sink_shrinks_at_its_rate_exactly():
    bred = toys.bred_vectors(
        toys.system("spiral-sink", decay=0.3), [1.0, 0.0], 3, amplitude=0.1, cycle=1.0, cycles=5,
        seed=1,
    )  # fmt: skip
    assert bred.rates == pytest.approx(np.full((5, 3), -0.3), abs=1e-7)


def test_amplitudes_beyond_the_attractor_shrink():
    # Two unrelated states lie sqrt(2) times the attractor's spread apart, about 20 on average; a
    # difference of 40 can only fall, however fast a small one grows.
    past = many_starts("lorenz-63", 200)[:50]
    chosen = {"cycle": 1.0, "cycles": 20, "seed": 1}
    assert toys.bred_vectors(LORENZ, past, 1, amplitude=40.0, **chosen).rates.mean() < -0.3
    assert toys.bred_vectors(LORENZ, past, 1, amplitude=1e-6, **chosen).rates.mean() > 0.8


def test_tiny_bred_vectors_align_with_the_leading_lyapunov_vector():
    past = many_starts("lorenz-63", 200)[:20]
    bred = toys.bred_vectors(LORENZ, past, 2, amplitude=1e-7, cycle=0.5, cycles=60, seed=1)
    found = toys.lyapunov_vectors(LORENZ, past, 1, 30.0, seed=2)
    cosine = np.sum(bred.vectors * found.vectors, axis=-1) / 1e-7
    assert np.abs(cosine) == pytest.approx(np.ones((20, 2)), abs=1e-5)
    assert np.allclose(bred.control, found.control, rtol=1e-4)


def test_members_are_the_vectors_bred_from_the_past():
    past, now = past_and_now("lorenz-96")
    chosen = {"amplitude": 0.5, "seed": 4, "norm": "area-weighted"}
    cycles = {"cycle": 1.0, "cycles": 4}
    members = toys.perturb(RING, now, 3, method="bred-vectors", past=past, **chosen, **cycles)
    bred = toys.bred_vectors(RING, past, 3, **chosen, **cycles)
    assert np.array_equal(bred.control, now)
    assert members - now == pytest.approx(bred.vectors, abs=1e-12)
    assert bred.rates.shape == (4, 3)


def test_driven_systems_are_bred_at_their_own_time():
    _, now = past_and_now("double-gyre-floats")
    chosen = options("bred-vectors", "double-gyre-floats") | {"method": "bred-vectors"}
    arguments = {"amplitude": 100.0, "seed": 1} | chosen
    assert toys.perturb(FLOATS, now, 2, time=TIME, **arguments).shape == (2, FLOATS.size)
    with pytest.raises(ArgumentError, match="past: expected a state that leads to the control"):
        toys.perturb(FLOATS, now, 2, time=TIME + 2.5, **arguments)


@pytest.mark.parametrize(
    "made",
    [
        lambda norm: toys.bred_vectors(
            LORENZ, [1.0, 2, 20], 1, amplitude=0.1, cycle=0.1, cycles=1, seed=1, norm=norm
        ),
        lambda norm: toys.lyapunov_vectors(LORENZ, [1.0, 2, 20], 1, 0.1, norm),
        lambda norm: toys.singular_vectors(LORENZ, [1.0, 2, 20], 0.1, 1, norm),
    ],
)
def test_unknown_norms_name_the_nearest(made):
    with pytest.raises(ArgumentError, match=r"norm: expected one of .*did you mean 'euclidean'"):
        made("euclidian")


@pytest.mark.parametrize(
    ("change", "message"),
    [
        (
            {"past": None},
            "past: expected the control at time -4, 4 before the start; found nothing",
        ),
        ({"past": np.ones((2, 40))}, "past: expected one state of 40 variables"),
        ({"past": np.ones(7)}, "past: expected an array whose last axis holds the 40 variables"),
        ({"cycles": 3}, "leads to the control in a time of 3 .*found a run that ends .* from it"),
        ({"dt": 0.025}, "past: expected a state that leads to the control"),
        ({"cycle": None}, "cycle: expected the time from one rescaling to the next"),
        ({"cycle": 0.99}, "cycle: expected a multiple of the time step 0.05; found 0.99.*take 1,"),
        ({"cycles": 0}, "cycles: expected a whole number of at least 1"),
        ({"amplitude": 0.0}, "amplitude: expected a finite number above zero"),
        ({"amplitude": 1e-300}, "no difference left in cycle 1"),
        ({"cylce": 1.0}, "did you mean 'cycle'"),
    ],
)
def test_wrong_options_are_refused(change, message):
    past, now = past_and_now("lorenz-96")
    arguments = {"past": past, "cycle": SPAN["lorenz-96"] / 4, "cycles": 4, "amplitude": 0.1}
    with pytest.raises(ArgumentError, match=message):
        toys.perturb(RING, now, 2, seed=1, method="bred-vectors", **arguments | change)
