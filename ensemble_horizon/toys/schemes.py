"""Fixed-step schemes for whole ensembles, each with its exact tangent."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np

from ensemble_horizon.toys.dynamics import System, Time
from ensemble_horizon.toys.norms import Array

# (system, states, dt, time) to states; with displacements after states, to both.
Advance = Callable[[System, Array, float, Time], Array]
AdvanceTangent = Callable[[System, Array, Array, float, Time], tuple[Array, Array]]


@dataclass(frozen=True)
class Scheme:
    """One way to advance: its name, its order of convergence, its source, its step."""

    name: str
    order: int
    source: str
    advance: Advance
    advance_tangent: AdvanceTangent


def step(system: System, states: Array, dt: float, time: Time = 0.0) -> Array:
    """Return states (..., N) one step of ``dt`` later, by the scheme of ``system``.

    Parameters
    ----------
    time : float or array
        Time of ``states``, an array broadcasting against their leading axes. It matters only to
        systems driven from outside.

    Examples
    --------
    >>> from ensemble_horizon.toys.systems.spiral import SpiralSink
    >>> step(SpiralSink(decay=1.0, rotation=0.0), np.array([1.0, 0.0]), 0.1).round(7).tolist()
    [0.9048375, 0.0]
    """
    return SCHEMES[system.scheme].advance(system, states, dt, time)


def tangent_step(
    system: System, states: Array, displacements: Array, dt: float, time: Time = 0.0
) -> tuple[Array, Array]:
    """Return states and infinitesimal displacements one step later.

    The displacements follow the derivative of `step` itself, not a separate discretisation of the
    linearised equations, so the result is exact for the numerical model.

    Parameters
    ----------
    states, displacements : array (..., N)
        Broadcast against each other.
    """
    return SCHEMES[system.scheme].advance_tangent(system, states, displacements, dt, time)


def runge_kutta(system: System, states: Array, dt: float, time: Time) -> Array:
    """Advance by the classical fourth-order Runge-Kutta scheme."""
    half, full = time + 0.5 * dt, time + dt
    k1 = system.tendency(states, time)
    k2 = system.tendency(states + 0.5 * dt * k1, half)
    k3 = system.tendency(states + 0.5 * dt * k2, half)
    k4 = system.tendency(states + dt * k3, full)
    return np.asarray(states + dt / 6.0 * (k1 + 2.0 * (k2 + k3) + k4))


def runge_kutta_tangent(
    system: System, states: Array, displacements: Array, dt: float, time: Time
) -> tuple[Array, Array]:
    """Advance states by `runge_kutta`, displacements by its derivative."""
    half, full = time + 0.5 * dt, time + dt
    k1 = system.tendency(states, time)
    d1 = system.tangent(states, displacements, time)
    at2 = states + 0.5 * dt * k1
    k2 = system.tendency(at2, half)
    d2 = system.tangent(at2, displacements + 0.5 * dt * d1, half)
    at3 = states + 0.5 * dt * k2
    k3 = system.tendency(at3, half)
    d3 = system.tangent(at3, displacements + 0.5 * dt * d2, half)
    at4 = states + dt * k3
    d4 = system.tangent(at4, displacements + dt * d3, full)
    later = states + dt / 6.0 * (k1 + 2.0 * (k2 + k3) + system.tendency(at4, full))
    return later, displacements + dt / 6.0 * (d1 + 2.0 * (d2 + d3) + d4)


SCHEMES: dict[str, Scheme] = {
    scheme.name: scheme
    for scheme in (
        Scheme(
            "runge-kutta",
            4,
            "Kutta 1901, Z. Math. Phys. 46 (from memory)",
            runge_kutta,
            runge_kutta_tangent,
        ),
    )
}
