"""Fixed-step fourth-order Runge-Kutta for whole ensembles, and its exact tangent."""

from __future__ import annotations

from typing import NamedTuple

import numpy as np
import numpy.typing as npt

from ensemble_horizon.checks import require_positive
from ensemble_horizon.errors import ArgumentError
from ensemble_horizon.toys.dynamics import Array, System, require_states


class Trajectory(NamedTuple):
    """States kept on the way: ``times`` (K,) from 0, ``states`` (K, ..., N), the first given."""

    times: Array
    states: Array


def rk4_step(system: System, states: Array, dt: float) -> Array:
    """Return states (..., N) one step of ``dt`` later, by classical fourth-order Runge-Kutta.

    Examples
    --------
    >>> from ensemble_horizon.toys.spiral import SpiralSink
    >>> rk4_step(SpiralSink(decay=1.0, rotation=0.0), np.array([1.0, 0.0]), 0.1).round(7).tolist()
    [0.9048375, 0.0]
    """
    k1 = system.tendency(states)
    k2 = system.tendency(states + 0.5 * dt * k1)
    k3 = system.tendency(states + 0.5 * dt * k2)
    k4 = system.tendency(states + dt * k3)
    return np.asarray(states + dt / 6.0 * (k1 + 2.0 * (k2 + k3) + k4))


def tangent_step(
    system: System, states: Array, displacements: Array, dt: float
) -> tuple[Array, Array]:
    """Return states and infinitesimal displacements one step later.

    The displacements follow the derivative of `rk4_step` itself, not a separate discretisation of
    the linearised equations, so the result is exact for the numerical model.

    Parameters
    ----------
    states, displacements : array (..., N)
        Broadcast against each other.
    """
    k1 = system.tendency(states)
    d1 = system.tangent(states, displacements)
    at2 = states + 0.5 * dt * k1
    k2 = system.tendency(at2)
    d2 = system.tangent(at2, displacements + 0.5 * dt * d1)
    at3 = states + 0.5 * dt * k2
    k3 = system.tendency(at3)
    d3 = system.tangent(at3, displacements + 0.5 * dt * d2)
    at4 = states + dt * k3
    d4 = system.tangent(at4, displacements + dt * d3)
    later = states + dt / 6.0 * (k1 + 2.0 * (k2 + k3) + system.tendency(at4))
    return later, displacements + dt / 6.0 * (d1 + 2.0 * (d2 + d3) + d4)


def integrate(
    system: System,
    states: npt.ArrayLike,
    steps: int,
    dt: float | None = None,
    every: int = 1,
) -> Trajectory:
    """Run all ``states`` forward together and keep every ``every``-th step.

    Parameters
    ----------
    system : System
    states : array (..., N)
        Initial states; leading axes (members, starts) are free.
    steps : int
        Number of steps, a multiple of ``every``.
    dt : float, optional
        Length of a step in the system's ``time_units``; ``system.step`` if left out.
    every : int
        Steps from one kept state to the next.

    Returns
    -------
    Trajectory
        ``steps / every + 1`` kept times and states, the initial ones first.

    Raises
    ------
    ArgumentError
        If an argument is out of range, or a state stops being finite: the message says when, after
        how many steps and where.

    Examples
    --------
    >>> from ensemble_horizon.toys.lorenz import Lorenz63
    >>> run = integrate(Lorenz63(), [[0.0, 1.0, 0.0], [0.0, 2.0, 0.0]], 100, every=50)
    >>> run.times.tolist(), run.states.shape
    ([0.0, 0.5, 1.0], (3, 2, 3))
    """
    current = require_states(system, states, "states")
    step = system.step if dt is None else require_positive(dt, "dt")
    _require_count(every, "every")
    _require_count(steps, "steps")
    if steps % every:
        raise ArgumentError(
            "steps",
            expected=f"a multiple of every={every}",
            found=str(steps),
            remedy=f"take {steps - steps % every or every}",
        )
    kept = np.empty((steps // every + 1, *current.shape))
    kept[0] = current
    # Overflow is looked for below, where it can be told with its time and place.
    with np.errstate(over="ignore", invalid="ignore"):
        for number in range(1, steps + 1):
            current = rk4_step(system, current, step)
            if not np.all(np.isfinite(current)):
                raise _blown_up(system, current, number, step)
            if number % every == 0:
                kept[number // every] = current
    return Trajectory(np.arange(kept.shape[0]) * (every * step), kept)


def _require_count(value: int, argument: str) -> None:
    if isinstance(value, bool) or not isinstance(value, int | np.integer) or value < 1:
        raise ArgumentError(
            argument,
            expected="a whole number of at least 1",
            found=repr(value),
            remedy="count in steps, not in units of time",
        )


def _blown_up(system: System, states: Array, number: int, dt: float) -> ArgumentError:
    """Return the error for the first non-finite state, naming time, step, member and variable."""
    place = np.argwhere(~np.isfinite(states))[0]
    member = f" of member {tuple(int(i) for i in place[:-1])}" if states.ndim > 1 else ""
    return ArgumentError(
        f"integrate({system.name})",
        expected="finite states",
        found=f"{system.variables[place[-1]]}{member} not finite at time {number * dt:g} "
        f"(step {number})",
        remedy=f"take a step shorter than dt={dt:g}, or a smaller initial state",
    )
