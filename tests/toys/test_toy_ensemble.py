"""Toy runs come in the layout that real forecasts are opened in."""

import numpy as np
import pytest

from ensemble_horizon import toys
from ensemble_horizon.errors import ArgumentError


def two_starts(system, members=4):
    start = system.default_state()
    norm = 0.01 * np.linalg.norm(start)
    return np.stack([toys.perturb(system, start, members, amplitude=norm, seed=s) for s in (1, 2)])


def test_series_without_a_clock():
    lorenz = toys.system("lorenz-63")
    initial = two_starts(lorenz)
    run = toys.run_ensemble(
        lorenz, initial, steps=300, every=100, start=["2001-01-01", "2001-01-02"]
    )
    assert run.x.dims == ("start", "lead", "member")
    assert dict(run.sizes) == {"start": 2, "lead": 4, "member": 4}
    assert run.lead.attrs["units"] == "1"
    assert run.lead.dtype == np.float64
    assert run.lead.values.tolist() == [0, 1, 2, 3]
    assert "valid" not in run.coords
    assert run.start.dtype == np.dtype("datetime64[ns]")
    expected = toys.integrate(lorenz, initial[1, 2], 300, every=100).states
    assert run.y.values[1, :, 2] == pytest.approx(expected[:, 1], rel=1e-9)
    assert run.attrs["parameter_rho"] == 28.0


def test_ring_of_sites_is_a_field_over_cells():
    ring = toys.system("lorenz-96")
    run = toys.run_ensemble(ring, two_starts(ring)[0], steps=4)
    assert run.x.dims == ("start", "lead", "member", "cell")
    assert run.longitude.dims == ("cell",)
    assert float(run.longitude[10]) == 90.0
    assert run.latitude.attrs["units"] == "degrees_north"


def test_channel_is_a_field_in_hours():
    channel = toys.system("two-layer-channel")
    initial = two_starts(channel)
    run = toys.run_ensemble(
        channel, initial, steps=48, every=8, start=["2001-01-01T00", "2001-01-01T12"]
    )
    wind = run.eastward_wind_lower
    assert wind.dims == ("start", "lead", "member", "latitude", "longitude")
    assert wind.attrs["units"] == "m s-1"
    assert wind.attrs["standard_name"] == "eastward_wind"
    assert run.lead.attrs["units"] == "hours"
    # Eight steps of a twenty-fourth of a day: whole hours, not 23.999999.
    assert run.lead.values.tolist() == [0, 8, 16, 24, 32, 40, 48]
    assert run.valid.values[1, 1] == np.datetime64("2001-01-01T20:00")
    assert float(abs(run.latitude.mean() - channel.latitude)) < 1e-9


def test_coefficients_on_request():
    channel = toys.system("two-layer-channel")
    run = toys.run_ensemble(
        channel, two_starts(channel), steps=2, on_grid=False, start=["2001-01-01", "2001-01-02"]
    )
    assert tuple(run.data_vars) == channel.variables
    assert run.lower_sine_1_2.dims == ("start", "lead", "member")
    assert run.lower_sine_1_2.attrs["units"] == "m2 s-1"
    assert "latitude" not in run.coords


def test_input_is_left_alone():
    lorenz = toys.system("lorenz-63")
    initial = two_starts(lorenz)[0]
    before = initial.copy()
    toys.run_ensemble(lorenz, initial, steps=10)
    assert np.array_equal(initial, before)


@pytest.mark.parametrize(
    ("change", "message"),
    [
        ({"start": "yesterday"}, "start: expected a date such as 2000-01-01T00:00"),
        ({"start": "2001-01-01"}, "start: expected 2 dates, one per start in initial; found 1"),
        ({"initial": np.zeros(3)}, "expected shape .member, variable. or"),
        ({"initial": np.zeros((4, 2))}, "initial: expected an array whose last axis"),
    ],
)
def test_wrong_arguments_are_refused(change, message):
    lorenz = toys.system("lorenz-63")
    arguments = {"initial": two_starts(lorenz), "steps": 5} | change
    with pytest.raises(ArgumentError, match=message):
        toys.run_ensemble(lorenz, **arguments)


def test_each_start_of_a_driven_system_has_its_own_time():
    floats = toys.system("double-gyre-floats")
    initial = np.tile(floats.default_state(), (2, 3, 1))
    together = toys.run_ensemble(
        floats,
        initial,
        steps=20,
        every=20,
        start=["2031-01-01", "2031-01-04"],
        time=np.array([[0.0], [3.0]]),
    )
    later = toys.run_ensemble(floats, initial[1], steps=20, every=20, time=3.0)
    assert np.array_equal(together.x_position[1], later.x_position[0])
    assert not np.allclose(together.x_position[0], together.x_position[1])
