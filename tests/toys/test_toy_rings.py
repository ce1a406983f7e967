"""Lorenz's rings of one and two scales against their equations, written out site by site."""

import numpy as np
import pytest

from ensemble_horizon import toys
from ensemble_horizon.errors import ArgumentError

TWO = toys.LorenzTwoScales(
    sites=6, fast_sites=4, forcing=9.0, coupling=0.7, speed_ratio=8.0, size_ratio=5.0
)


def lively(system, *leading, seed=1):
    return np.random.default_rng(seed).standard_normal((*leading, system.size)) * 3.0


@pytest.mark.parametrize("sites", [4, 5, 40])
def test_one_scale_as_written_out(sites):
    # Lorenz and Emanuel 1998, equation 1.
    ring = toys.Lorenz96(sites=sites, forcing=7.0)
    x = lively(ring)
    expected = [(x[(k + 1) % sites] - x[k - 2]) * x[k - 1] - x[k] + 7.0 for k in range(sites)]
    assert ring.tendency(x) == pytest.approx(np.array(expected), rel=1e-13)


@pytest.mark.parametrize("system", [TWO, toys.LorenzTwoScales(sites=4, fast_sites=1)], ids=str)
def test_two_scales_as_written_out(system):
    # Lorenz 1996, equations 2 and 3 (from memory), index by index.
    K, J = system.sites, system.fast_sites
    F, h, c, b = system.forcing, system.coupling, system.speed_ratio, system.size_ratio
    state = lively(system)
    x, y = state[:K], state[K:]
    slow = [
        -x[k - 1] * (x[k - 2] - x[(k + 1) % K])
        - x[k]
        + F
        - h * c / b * sum(y[J * k + j] for j in range(J))
        for k in range(K)
    ]
    M = K * J
    fast = [
        -c * b * y[(m + 1) % M] * (y[(m + 2) % M] - y[m - 1]) - c * y[m] + h * c / b * x[m // J]
        for m in range(M)
    ]
    assert system.tendency(state) == pytest.approx(np.array(slow + fast), rel=1e-12)


def test_advection_and_coupling_conserve_the_energy():
    """Half the sum of squares changes by damping and forcing alone (Lorenz 1996)."""
    states = lively(TWO, 20)
    x, y = states[:, :6], states[:, 6:]
    change = np.sum(states * TWO.tendency(states), axis=-1)
    expected = np.sum(9.0 * x - x**2, axis=-1) - 8.0 * np.sum(y**2, axis=-1)
    assert change == pytest.approx(expected, rel=1e-10)


def test_without_coupling_each_scale_is_a_ring_of_its_own():
    free = toys.LorenzTwoScales(sites=8, fast_sites=5, coupling=0.0)
    state = lively(free)
    change = free.tendency(state)
    assert change[:8] == pytest.approx(
        toys.Lorenz96(sites=8, forcing=10.0).tendency(state[:8]), rel=1e-12
    )
    # b times the fast values, read backwards, in time c times as fast.
    mirrored = toys.Lorenz96(sites=40, forcing=0.0).tendency(10.0 * state[:7:-1])
    assert change[:7:-1] == pytest.approx(mirrored, rel=1e-12)


def test_fast_values_are_smaller_and_quicker():
    system = toys.system("lorenz-96-two-scales")
    run = toys.integrate(system, toys.settled(system), 1000, every=4)
    x, y = run.states[:, :36], run.states[:, 36:]
    assert 4 < x.std() / y.std() < 25

    def memory(values):
        """Time at which the correlation of a site with its own past falls below a half."""
        anomaly = values - values.mean(axis=0)
        lagged = [
            np.mean(anomaly[: len(anomaly) - lag] * anomaly[lag:]) / np.mean(anomaly**2)
            for lag in range(60)
        ]
        return run.times[np.argmax(np.array(lagged) < 0.5)]

    assert memory(x) > 3 * memory(y) > 0


def test_fields_hold_every_value_at_its_site():
    states = lively(TWO, 2, 3)
    fields = {field.name: field for field in TWO.fields_of(states)}
    assert list(fields) == ["x", "y1", "y2", "y3", "y4"]
    for field in fields.values():
        assert field.dims == ("cell",)
        assert field.values.shape == (2, 3, 6)
    names = dict(zip(TWO.variables, np.moveaxis(states, -1, 0), strict=True))
    assert np.array_equal(fields["x"].values[..., 5], names["x5"])
    assert np.array_equal(fields["y3"].values[..., 4], names["y4_3"])
    run = toys.run_ensemble(TWO, states, steps=2, start=["2001-01-01", "2001-01-02"])
    assert run.y4.dims == ("start", "lead", "member", "cell")


def test_slow_values_go_over_to_the_one_scale_ring():
    states = lively(TWO, 3)
    carried = TWO.carried_over(states, toys.Lorenz96(sites=6))
    assert np.array_equal(carried, states[:, :6])
    carried[:] = 0
    assert np.all(states[:, :6] != 0)
    with pytest.raises(ArgumentError, match=r"other: expected a lorenz-96 system of 6 sites") as e:
        TWO.carried_over(states, toys.Lorenz96(sites=40))
    assert e.value.remedy == "set its sites to 6"
    with pytest.raises(ArgumentError, match="takes over the 6 variables of lorenz-96; found"):
        toys.Lorenz96(sites=6).carried_over(states[:, :6], TWO)
