"""Fixed-step schemes for whole ensembles, each with its exact tangent."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np

from ensemble_horizon.errors import ArgumentError
from ensemble_horizon.toys.dynamics import System, Time
from ensemble_horizon.toys.mechanics import SplitSystem
from ensemble_horizon.toys.norms import Array

# (system, states, dt, time) to states; with displacements after states, to both.
Advance = Callable[[System, Array, float, Time], Array]
AdvanceTangent = Callable[[System, Array, Array, float, Time], tuple[Array, Array]]

# Parts of a step by which positions (seven times) and velocities (six times) advance in turn, a
# palindrome, so that steps back undo steps forth. From memory; their sums meet the conditions of
# order 4 to rounding.
_DRIFTS = (0.0792036964311957, 0.353172906049774, -0.0420650803577195)
_KICKS = (0.209515106613362, -0.143851773179818)
_MIDDLE = 0.5 - sum(_KICKS)
DRIFTS = (*_DRIFTS, 1.0 - 2.0 * sum(_DRIFTS), *reversed(_DRIFTS))
KICKS = (*_KICKS, _MIDDLE, _MIDDLE, *reversed(_KICKS))


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
    k2 = system.tendency(_on(states, k1, 0.5 * dt), half)
    k3 = system.tendency(_on(states, k2, 0.5 * dt), half)
    k4 = system.tendency(_on(states, k3, dt), full)
    return _summed(states, k1, k2, k3, k4, dt)


def runge_kutta_tangent(
    system: System, states: Array, displacements: Array, dt: float, time: Time
) -> tuple[Array, Array]:
    """Advance states by `runge_kutta`, displacements by its derivative."""
    half, full = time + 0.5 * dt, time + dt
    k1 = system.tendency(states, time)
    d1 = system.tangent(states, displacements, time)
    at2 = _on(states, k1, 0.5 * dt)
    k2 = system.tendency(at2, half)
    d2 = system.tangent(at2, _on(displacements, d1, 0.5 * dt), half)
    at3 = _on(states, k2, 0.5 * dt)
    k3 = system.tendency(at3, half)
    d3 = system.tangent(at3, _on(displacements, d2, 0.5 * dt), half)
    at4 = _on(states, k3, dt)
    k4 = system.tendency(at4, full)
    d4 = system.tangent(at4, _on(displacements, d3, dt), full)
    return _summed(states, k1, k2, k3, k4, dt), _summed(displacements, d1, d2, d3, d4, dt)


# Large ensembles spend their time on memory: sums go into the arrays that are there already.


def _on(base: Array, slope: Array, dt: float) -> Array:
    """Return base + dt slope."""
    out = slope * dt
    if out.shape != np.broadcast_shapes(out.shape, base.shape):
        return np.asarray(base + out)
    out += base
    return out


def _summed(base: Array, k1: Array, k2: Array, k3: Array, k4: Array, dt: float) -> Array:
    """Return base + dt / 6 (k1 + 2 (k2 + k3) + k4), in the room of ``k2``."""
    k2 += k3
    k2 *= 2.0
    k2 += k1
    k2 += k4
    k2 *= dt / 6.0
    return np.asarray(base + k2)


def symplectic(system: System, states: Array, dt: float, time: Time) -> Array:
    """Advance positions and velocities in turn by a symplectic composition of order 4.

    It keeps volumes and angular momentum to rounding, and the error of the energy bounded instead
    of growing; at equal work its error on a Kepler orbit is a twentieth of that of the shortest
    composition of order 4 (Forest and Ruth 1990, Physica D 43).

    Raises
    ------
    ArgumentError
        If the system is not a `SplitSystem`.
    """
    split = _require_split(system)
    positions, velocities = split.split(states)
    for drift, kick in zip(DRIFTS, KICKS, strict=False):
        positions = positions + drift * dt * velocities
        velocities = velocities + kick * dt * split.acceleration(positions)
    return np.concatenate([positions + DRIFTS[-1] * dt * velocities, velocities], axis=-1)


def symplectic_tangent(
    system: System, states: Array, displacements: Array, dt: float, time: Time
) -> tuple[Array, Array]:
    """Advance states by `symplectic`, displacements by its derivative, a symplectic matrix."""
    split = _require_split(system)
    positions, velocities = split.split(states)
    moved, faster = split.split(displacements)
    for drift, kick in zip(DRIFTS, KICKS, strict=False):
        positions = positions + drift * dt * velocities
        moved = moved + drift * dt * faster
        velocities = velocities + kick * dt * split.acceleration(positions)
        faster = faster + kick * dt * split.acceleration_tangent(positions, moved)
    later = np.concatenate([positions + DRIFTS[-1] * dt * velocities, velocities], axis=-1)
    return later, np.concatenate([moved + DRIFTS[-1] * dt * faster, faster], axis=-1)


def _require_split(system: System) -> SplitSystem:
    """Return ``system`` if its states split into positions and velocities."""
    if not isinstance(system, SplitSystem):
        raise ArgumentError(
            f"scheme of {system.name}",
            expected="a system of positions and velocities (SplitSystem) for 'symplectic'",
            found=f"{type(system).__name__}, which does not split",
            remedy="set scheme = 'runge-kutta'",
        )
    return system


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
        Scheme(
            "symplectic",
            4,
            "Blanes and Moan 2002, J. Comput. Appl. Math. 142, S6 (from memory)",
            symplectic,
            symplectic_tangent,
        ),
    )
}
