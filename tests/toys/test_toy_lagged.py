"""Lagged starts: runs from earlier analyses as they stand at the start."""

import numpy as np
import pytest
from perturbation_cases import FLOATS, RING, TIME, past_and_now

from ensemble_horizon import toys
from ensemble_horizon.errors import ArgumentError

LAGS = np.array([0.5, 1.0, 1.5, 2.0])


@pytest.fixture(scope="module")
def truth():
    """A run of two units of time, a state every half."""
    return toys.integrate(RING, toys.settled(RING), 40, every=10).states


@pytest.fixture(scope="module")
def analyses(truth):
    """Analyses with errors of 0.01, the youngest first."""
    states = truth[:-1][::-1]
    return np.stack(
        [toys.perturb(RING, s, 1, amplitude=0.01, seed=k)[0] for k, s in enumerate(states)]
    )


def lagged(truth, analyses, **change):
    chosen = {"members": 4, "amplitude": None, "past": analyses, "ages": LAGS} | change
    return toys.perturb(RING, truth[-1], seed=1, method="lagged", **chosen)


def test_members_are_the_runs_themselves(truth, analyses):
    members = lagged(truth, analyses)
    for member, lag in enumerate(LAGS):
        steps = round(lag / RING.step)
        run = toys.integrate(RING, analyses[member], steps, every=steps).states[-1]
        # Control plus (run minus control) rounds once more.
        assert members[member] == pytest.approx(run, abs=1e-14 * np.abs(run).max())


def test_older_analyses_are_farther_off(truth, analyses):
    distance = np.linalg.norm(lagged(truth, analyses) - truth[-1], axis=-1)
    # Errors double in about 0.4 units of time (Lorenz and Emanuel 1998), fastest ones sooner.
    assert distance[-1] > 2 * distance[0]


def test_an_amplitude_scales_them(truth, analyses):
    whole = lagged(truth, analyses) - truth[-1]
    short = lagged(truth, analyses, amplitude=0.2) - truth[-1]
    assert np.linalg.norm(short, axis=-1) == pytest.approx(np.full(4, 0.2), rel=1e-12)
    length = np.linalg.norm(whole, axis=-1, keepdims=True)
    assert short / 0.2 == pytest.approx(whole / length, abs=1e-12)


def test_pairs_as_they_are(truth, analyses):
    members = lagged(truth, analyses, members=8, paired=True)
    whole = lagged(truth, analyses)
    assert members[::2] == pytest.approx(whole, abs=1e-12)
    assert members[1::2] == pytest.approx(2 * truth[-1] - whole, abs=1e-12)


def test_a_perfect_past_is_no_perturbation(truth):
    with pytest.raises(ArgumentError, match=r"past\[0\]: expected an analysis with an error"):
        lagged(truth, truth[:-1][::-1])


def test_driven_systems_are_run_at_their_own_time():
    # Run from its own time an earlier state of the control comes back to it, from another not.
    past, now = past_and_now("double-gyre-floats")
    chosen = {"amplitude": None, "seed": 1, "method": "lagged", "past": [past], "ages": [5.0]}
    with pytest.raises(ArgumentError, match="comes back to the control"):
        toys.perturb(FLOATS, now, 1, time=TIME, **chosen)
    assert toys.perturb(FLOATS, now, 1, time=TIME + 2.5, **chosen).shape == (1, 16)


@pytest.mark.parametrize(
    ("change", "message"),
    [
        ({"members": 5}, "members: expected at most the 4 earlier states given as past; found 5"),
        ({"past": None}, "past: expected earlier states .K, N. as past and .*found nothing"),
        ({"ages": None}, "ages: expected earlier states"),
        ({"ages": LAGS[:3]}, "ages: expected one time above zero per earlier state"),
        ({"ages": -LAGS}, "ages: expected one time above zero per earlier state"),
        ({"ages": LAGS + 0.01}, "ages: expected a multiple of the time step 0.05; found 0.51"),
    ],
)
def test_wrong_options_are_refused(truth, analyses, change, message):
    with pytest.raises(ArgumentError, match=message):
        lagged(truth, analyses, **change)
