"""States carried over from one system to a relative."""

import numpy as np
import pytest

from ensemble_horizon import toys
from ensemble_horizon.errors import ArgumentError

COARSE = toys.TwoLayerChannel(zonal_waves=2, meridional_modes=3)
FINE = toys.TwoLayerChannel(zonal_waves=5, meridional_modes=4, shear=40.0)


def lively(channel, *leading):
    return np.random.default_rng(2).standard_normal((*leading, channel.size)) * 1e6


@pytest.mark.parametrize("name", sorted(toys.SYSTEMS))
def test_every_system_carries_over_to_itself(name):
    system = toys.system(name)
    states = np.stack([system.default_state(), 2 * system.default_state()])
    carried = system.carried_over(states, system)
    assert np.array_equal(carried, states)
    assert not np.shares_memory(carried, states)
    stranger = toys.system("lorenz-63" if name != "lorenz-63" else "rossler")
    with pytest.raises(ArgumentError, match=f"takes over the .* variables of {name}; found"):
        system.carried_over(states, stranger)
    with pytest.raises(ArgumentError, match=f"states: .* variables of {name}"):
        system.carried_over(states[..., 1:], system)


def test_a_finer_channel_holds_the_same_flow():
    states = lively(COARSE, 2, 3)
    carried = COARSE.carried_over(states, FINE)
    assert carried.shape == (2, 3, FINE.size)
    latitude, longitude = COARSE.latitude + np.array([-9.0, 0.5, 14.0]), [1.0, 20.0, 31.0, 50.0]
    before = COARSE.evaluate(states, latitude, longitude)
    after = FINE.evaluate(carried, latitude, longitude)
    for name, values in before.items():
        assert after[name] == pytest.approx(values, rel=1e-10, abs=1e-10 * np.abs(values).max())


def test_up_and_down_again_is_exact():
    states = lively(COARSE, 4)
    assert np.array_equal(FINE.carried_over(COARSE.carried_over(states, FINE), COARSE), states)


@pytest.mark.parametrize(
    "other",
    [COARSE, toys.TwoLayerChannel(zonal_waves=7, meridional_modes=2)],
    ids=["fewer-of-both", "more-waves-fewer-modes"],
)
def test_shared_waves_keep_their_names(other):
    states = lively(FINE)
    carried = FINE.carried_over(states, other)
    here = dict(zip(FINE.variables, states, strict=True))
    for name, value in zip(other.variables, carried, strict=True):
        assert value == here.get(name, 0.0), name


def test_another_geometry_is_refused():
    narrow = toys.TwoLayerChannel(width=4.0e6)
    with pytest.raises(ArgumentError, match=r"4.5e.06 m long and 5e.06 m wide; found") as caught:
        COARSE.carried_over(lively(COARSE), narrow)
    assert "take the same length and width" in caught.value.remedy
