"""Independent runs on the attractor, to average over."""

from __future__ import annotations

from typing import NamedTuple

import numpy as np
import numpy.typing as npt

from ensemble_horizon.errors import ArgumentError
from ensemble_horizon.toys.dynamics import System, require_states
from ensemble_horizon.toys.integration import march
from ensemble_horizon.toys.norms import Array

# Scatter of members that start from one state, relative to its size: small enough to stay in its
# basin, and far above what a spin-up of a chaotic system needs to forget.
SCATTER = 1e-3


class Orbits(NamedTuple):
    """States (M, N) and the time (M,) of each."""

    states: Array
    times: Array


def started(
    system: System, state: npt.ArrayLike | None, members: int | None, random: np.random.Generator
) -> Array:
    """Return states (M, N) to spin up: scattered round ``state`` (N,), or ``state`` (M, N) itself.

    Raises
    ------
    ArgumentError
        If the state does not fit the system, or ``members`` is not the number of states given.
    """
    given = require_states(system, system.default_state() if state is None else state, "state")
    if given.ndim == 1 and members is not None:
        size = float(np.linalg.norm(given)) / np.sqrt(system.size)
        scatter = random.standard_normal((members, system.size))
        return np.asarray(given + SCATTER * (size or 1.0) * scatter)
    if given.ndim != 2 or members not in (None, len(given)):
        raise ArgumentError(
            "state",
            expected="one state (N,), or one per member (members, N)",
            found=f"shape {given.shape}" + ("" if members is None else f" for {members} members"),
            remedy="leave members out if you give a state for each",
        )
    return given


def spun_up(
    system: System, states: Array, steps: int, apart: int, dt: float, random: np.random.Generator
) -> Orbits:
    """Return every member after ``steps`` and a random number more, up to ``apart``.

    The random times spread members evenly over the phases of a cycle, which the scatter of their
    starts cannot do where errors do not grow.
    """
    last = steps + random.integers(0, apart + 1, len(states))
    kept = states.copy()
    for number, current in enumerate(march(system, states, steps + apart, dt)):
        arrived = last == number
        kept[arrived] = current[arrived]
    return Orbits(kept, dt * last.astype(float))
