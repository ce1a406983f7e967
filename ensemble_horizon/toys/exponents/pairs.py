"""The leading exponent from pairs of runs, without tangent vectors."""

from __future__ import annotations

import numpy as np
import numpy.typing as npt

from ensemble_horizon.checks import require_positive
from ensemble_horizon.toys.dynamics import System
from ensemble_horizon.toys.exponents.averaging import (
    Progress,
    averaged,
    members_ready,
    planned,
    starting_states,
)
from ensemble_horizon.toys.exponents.carrier import Pairs
from ensemble_horizon.toys.exponents.record import Exponents
from ensemble_horizon.toys.perturbations.method import require_whole

# Distance between the two runs, relative to the size of the states: ten digits above rounding, and
# a millionth part away from where growth saturates.
AMPLITUDE = 1e-6
EVERY = 20


def pair_growth(
    system: System,
    *,
    amplitude: float | None = None,
    every: int = EVERY,
    length: float | None = None,
    members: int | None = None,
    spin_up: float | None = None,
    dt: float | None = None,
    seed: int = 0,
    confidence: float = 0.9,
    state: npt.ArrayLike | None = None,
    progress: Progress | None = None,
) -> Exponents:
    """Return the leading Lyapunov exponent from many pairs of a run and its perturbed twin.

    The twin starts at the distance ``amplitude`` in a random direction. Every ``every`` steps the
    growth of the distance is noted, and the twin brought back to the amplitude along the line
    between the two. Only the equations themselves are used, so this is a check on `tangent` and
    `jacobian`, and works for what has neither. Memory does not depend on the length.

    Parameters
    ----------
    amplitude : float, optional
        Distance in ``state_units`` (root of the sum of squares); a millionth of the root mean
        square distance of the spun-up states from zero if left out.
    every : int
        Steps from one rescaling to the next.
    system, length, members, spin_up, dt, seed, confidence, state, progress
        As for `lyapunov_exponents` with ``count=1``.

    Returns
    -------
    Exponents
        With one exponent. To the interval belongs twice the difference that half the step and half
        the amplitude together make to the growth measured from the same states.

    Raises
    ------
    ArgumentError
        As for `lyapunov_exponents`, and if a twin comes to lie upon its control.

    Notes
    -----
    Source: Benettin, Galgani and Strelcyn 1976, Phys. Rev. A 14 (from memory).

    Examples
    --------
    >>> from ensemble_horizon import toys
    >>> found = pair_growth(toys.system("lorenz-63"), length=2000.0, members=100, dt=0.02)
    >>> round(float(found.exponents[0]), 1)
    0.9
    """
    random = np.random.default_rng(require_whole(seed, "seed", 0))
    states = starting_states(system, 1, members, state, length, random)
    plan = planned(
        system,
        1,
        len(states),
        length=length,
        spin_up=spin_up,
        dt=dt,
        every=every,
        confidence=confidence,
        one_state=state is None or np.ndim(state) < 2,
    )
    orbits = members_ready(system, states, plan, random)
    if amplitude is None:
        size = float(np.sqrt(np.mean(np.sum(orbits.states**2, axis=-1))))
        distance = AMPLITUDE * (size or 1.0)
    else:
        distance = require_positive(amplitude, "amplitude")
    first = random.standard_normal((len(states), 1, system.size))
    carrier = Pairs(system, orbits.states, orbits.times, first, distance)
    return averaged(carrier.standardised()[0], plan, progress)
