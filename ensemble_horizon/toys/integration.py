"""Runs of whole ensembles: kept in memory, or handed on as they go."""

from __future__ import annotations

from collections.abc import Iterator
from typing import NamedTuple

import numpy as np
import numpy.typing as npt

from ensemble_horizon.checks import require_positive
from ensemble_horizon.errors import ArgumentError
from ensemble_horizon.toys.dynamics import System, Time, require_states
from ensemble_horizon.toys.norms import Array
from ensemble_horizon.toys.schemes import step as one_step


class Trajectory(NamedTuple):
    """States kept on the way: ``times`` (K,) from 0, ``states`` (K, ..., N), the first given."""

    times: Array
    states: Array


def march(
    system: System,
    states: npt.ArrayLike,
    steps: int,
    dt: float | None = None,
    every: int = 1,
    time: Time = 0.0,
) -> Iterator[Array]:
    """Run all ``states`` forward and yield them (..., N) at every ``every``-th step.

    The initial states come first; nothing is kept, so memory does not grow with the length of the
    run. Parameters and errors are those of `integrate`.

    Examples
    --------
    >>> from ensemble_horizon.toys.systems.spiral import SpiralSink
    >>> sink = SpiralSink(decay=1.0, rotation=0.0)
    >>> [round(float(state[0]), 3) for state in march(sink, [1.0, 0.0], 20, 0.1, every=10)]
    [1.0, 0.368, 0.135]
    """
    current = require_states(system, states, "states")
    length = system.step if dt is None else require_positive(dt, "dt")
    require_count(every, "every")
    require_count(steps, "steps")
    if steps % every:
        raise ArgumentError(
            "steps",
            expected=f"a multiple of every={every}",
            found=str(steps),
            remedy=f"take {steps - steps % every or every}",
        )
    return _march(system, current, steps, length, every, time)


def _march(
    system: System, current: Array, steps: int, dt: float, every: int, time: Time
) -> Iterator[Array]:
    yield current
    for number in range(1, steps + 1):
        # Overflow is looked for right below, where it can be told with its time and place.
        with np.errstate(over="ignore", invalid="ignore"):
            current = one_step(system, current, dt, time + (number - 1) * dt)
        if not np.all(np.isfinite(current)):
            raise blown_up(system, current, number, dt)
        if number % every == 0:
            yield current


def integrate(
    system: System,
    states: npt.ArrayLike,
    steps: int,
    dt: float | None = None,
    every: int = 1,
    time: Time = 0.0,
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
    time : float or array
        Time of the initial states, an array broadcasting against their leading axes; it matters
        only to systems driven from outside.

    Returns
    -------
    Trajectory
        ``steps / every + 1`` kept times (since the start) and states, the initial ones first.

    Raises
    ------
    ArgumentError
        If an argument is out of range, or a state stops being finite: the message says when, after
        how many steps and where.

    Examples
    --------
    >>> from ensemble_horizon.toys.systems.lorenz import Lorenz63
    >>> run = integrate(Lorenz63(), [[0.0, 1.0, 0.0], [0.0, 2.0, 0.0]], 100, every=50)
    >>> run.times.tolist(), run.states.shape
    ([0.0, 0.5, 1.0], (3, 2, 3))
    """
    on_the_way = march(system, states, steps, dt, every, time)
    first = next(on_the_way)
    kept = np.empty((steps // every + 1, *first.shape))
    kept[0] = first
    for number, current in enumerate(on_the_way, start=1):
        kept[number] = current
    length = system.step if dt is None else dt
    return Trajectory(np.arange(kept.shape[0]) * (every * length), kept)


def settled(system: System, states: npt.ArrayLike | None = None) -> Array:
    """Return ``states`` (..., N), the default state if left out, after ``system.spin_up``.

    Examples
    --------
    >>> from ensemble_horizon.toys.systems.lorenz import Lorenz63
    >>> settled(Lorenz63()).shape
    (3,)
    """
    current = require_states(system, system.default_state() if states is None else states, "states")
    steps = round(system.spin_up / system.step)
    return integrate(system, current, steps, every=steps).states[-1] if steps else current


def require_count(value: int, argument: str) -> None:
    """Raise `ArgumentError` unless ``value`` is a whole number of at least 1."""
    if isinstance(value, bool) or not isinstance(value, int | np.integer) or value < 1:
        raise ArgumentError(
            argument,
            expected="a whole number of at least 1",
            found=repr(value),
            remedy="count in steps, not in units of time",
        )


def blown_up(system: System, states: Array, number: int, dt: float) -> ArgumentError:
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
