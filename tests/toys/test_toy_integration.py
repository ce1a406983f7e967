"""Runs that end well, runs that do not, and the arguments in between."""

import numpy as np
import pytest

from ensemble_horizon import toys
from ensemble_horizon.errors import ArgumentError


def test_spiral_follows_its_closed_form():
    spiral = toys.system("spiral-sink", decay=0.3, rotation=2.0)
    run = toys.integrate(spiral, [[1.0, 0.0], [0.0, 2.0]], 400, 0.01, every=100)
    angle, shrink = 2.0 * run.times, np.exp(-0.3 * run.times)
    assert run.times == pytest.approx([0, 1, 2, 3, 4])
    expected = shrink[:, None] * np.stack([np.cos(angle), np.sin(angle)], axis=-1)
    assert run.states[:, 0] == pytest.approx(expected, abs=1e-8)
    assert run.states[:, 1, 1] == pytest.approx(2 * expected[:, 0], abs=1e-8)


def test_members_do_not_touch_each_other():
    lorenz = toys.system("lorenz-63")
    initial = toys.perturb(lorenz, lorenz.default_state(), 6, amplitude=0.5, seed=1)
    together = toys.integrate(lorenz, initial, 300).states
    alone = toys.integrate(lorenz, initial[4], 300).states
    assert np.array_equal(together[:, 4], alone)


def test_stops_at_the_first_state_that_is_not_finite():
    # A step far beyond the stability limit of Runge-Kutta: the fourth member runs off first.
    lorenz = toys.system("lorenz-63")
    initial = np.tile(lorenz.default_state(), (5, 1))
    initial[3] = 100.0
    with pytest.raises(ArgumentError) as caught:
        toys.integrate(lorenz, initial, 100, dt=0.25)
    assert caught.value.culprit == "integrate(lorenz-63)"
    assert "of member (3,) not finite at time" in caught.value.found
    step = int(caught.value.found.split("(step ")[1].rstrip(")"))
    assert f"at time {step * 0.25:g} " in caught.value.found
    assert "shorter than dt=0.25" in caught.value.remedy
    assert step > 1
    assert np.all(np.isfinite(toys.integrate(lorenz, initial, step - 1, dt=0.25).states))


@pytest.mark.parametrize(
    ("arguments", "culprit", "remedy"),
    [
        ({"steps": 10, "every": 3}, "steps", "take 9"),
        ({"steps": 0}, "steps", "count in steps"),
        ({"steps": 2.5}, "steps", "count in steps"),
        ({"steps": 10, "every": 0}, "every", "count in steps"),
        ({"steps": 10, "dt": -0.1}, "dt", "correct the value"),
    ],
)
def test_wrong_arguments_are_refused(arguments, culprit, remedy):
    lorenz = toys.system("lorenz-63")
    with pytest.raises(ArgumentError, match=remedy) as caught:
        toys.integrate(lorenz, lorenz.default_state(), **arguments)
    assert caught.value.culprit == culprit


def test_wrong_states_are_refused():
    lorenz = toys.system("lorenz-63")
    with pytest.raises(ArgumentError, match="holds the 3 variables of lorenz-63; found shape"):
        toys.integrate(lorenz, np.zeros((3, 4)), 10)
    with pytest.raises(ArgumentError, match="expected finite numbers; found 1 that are not"):
        toys.integrate(lorenz, [0.0, np.nan, 1.0], 10)
