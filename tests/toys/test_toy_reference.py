"""The adaptive reference: accurate, member by member, and clear where it ends."""

import numpy as np
import pytest

from ensemble_horizon import toys
from ensemble_horizon.errors import ArgumentError


def test_a_closed_form_to_the_tolerance():
    sink = toys.SpiralSink(decay=0.3, rotation=2.0)
    times = np.linspace(0.0, 10.0, 23)
    run = toys.integrate_adaptively(sink, [1.0, 0.0], times, rtol=1e-11)
    radius = np.exp(-0.3 * times)
    exact = np.stack([radius * np.cos(2 * times), radius * np.sin(2 * times)], axis=-1)
    assert np.array_equal(run.times, times)
    assert run.states == pytest.approx(exact, abs=1e-9)


def test_members_are_as_accurate_alone_as_together():
    lorenz = toys.Lorenz63()
    start = np.array([[[1.0, 2.0, 20.0], [1e-6, 0.0, 0.0]], [[5.0, 5.0, 5.0], [-9.0, -7.0, 30.0]]])
    together = toys.integrate_adaptively(lorenz, start, [0.5, 2.0]).states
    assert together.shape == (2, 2, 2, 3)
    for place in np.ndindex(2, 2):
        alone = toys.integrate_adaptively(lorenz, start[place], [0.5, 2.0]).states
        assert np.array_equal(together[(slice(None), *place)], alone)


def test_tighter_tolerance_is_nearer_to_the_closed_form():
    pair = toys.TwoBody(eccentricity=0.5)
    start, period = pair.default_state(), 2.0 * np.pi
    errors = [
        np.abs(toys.integrate_adaptively(pair, start, [period], rtol=r).states[0] - start).max()
        for r in (1e-6, 1e-8, 1e-10, 1e-12)
    ]
    assert errors == sorted(errors, reverse=True)
    assert errors[-1] < 1e-10


def test_a_driven_system_is_run_at_its_own_time():
    floats = toys.GyreFloats(rows=1, columns=2)
    start = floats.default_state()
    half = toys.integrate_adaptively(floats, start, [3.0]).states[0]
    whole = toys.integrate_adaptively(floats, start, [7.0]).states[0]
    again = toys.integrate_adaptively(floats, [start, half], [4.0], time=[0.0, 3.0]).states[0]
    assert again[1] == pytest.approx(whole, abs=1e-4)
    assert np.abs(again[0] - again[1]).max() > 1000.0


def test_says_where_it_gives_up():
    # Two bodies at rest fall into each other: at pi / (2 sqrt 2), a closed form, all ends.
    pair = toys.TwoBody(eccentricity=0.0)
    falling = pair.default_state() * np.repeat([1.0, 0.0], 4)
    circling = pair.default_state()
    message = r"integrate_adaptively\(two-body\).*member \(1,\) breaks off after time 1\.11072"
    with pytest.raises(ArgumentError, match=message) as told:
        toys.integrate_adaptively(pair, [circling, falling], [1.0, 2.0])
    assert told.value.remedy == "end times before, or start from another state"
    with pytest.raises(ArgumentError, match=r"after time 0: the tendency is not finite"):
        toys.integrate_adaptively(pair, np.zeros(8), [1.0])


@pytest.mark.parametrize(
    ("arguments", "message"),
    [
        ({"times": [1.0, 0.5]}, "times: expected finite, strictly increasing"),
        ({"times": [-1.0, 0.5]}, "times: expected at least one time, none before the start"),
        ({"times": []}, "times: expected at least one time"),
        ({"rtol": 0.0}, "rtol: expected a finite number above zero"),
        ({"atol": -1.0}, "atol: expected a finite number of at least zero"),
        ({"states": [1.0]}, "states: expected an array whose last axis holds the 2 variables"),
    ],
)
def test_arguments_out_of_range(arguments, message):
    given = {"states": [1.0, 0.0], "times": [0.0, 1.0], **arguments}
    with pytest.raises(ArgumentError, match=message):
        toys.integrate_adaptively(
            toys.SpiralSink(), given.pop("states"), given.pop("times"), **given
        )
