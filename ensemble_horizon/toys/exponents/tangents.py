"""Lyapunov exponents from tangent vectors, orthonormalised as they go."""

from __future__ import annotations

import numpy as np
import numpy.typing as npt

from ensemble_horizon.toys.dynamics import System
from ensemble_horizon.toys.exponents.averaging import (
    Progress,
    averaged,
    members_ready,
    planned,
    starting_states,
)
from ensemble_horizon.toys.exponents.carrier import Tangents
from ensemble_horizon.toys.exponents.record import Exponents
from ensemble_horizon.toys.perturbations.method import require_at_most, require_whole

# A stable explicit step shrinks by less than e^3, so five steps leave ten digits of the weakest
# direction. A single vector loses nothing.
EVERY, EVERY_ALONE = 5, 20


def lyapunov_exponents(
    system: System,
    count: int | None = None,
    *,
    length: float | None = None,
    members: int | None = None,
    spin_up: float | None = None,
    dt: float | None = None,
    every: int | None = None,
    seed: int = 0,
    confidence: float = 0.9,
    state: npt.ArrayLike | None = None,
    progress: Progress | None = None,
) -> Exponents:
    """Return the leading Lyapunov exponents of ``system`` with their intervals.

    Tangent vectors are carried along independent runs by the exact derivative of the numerical
    scheme and orthonormalised by QR as they go; the exponents are the mean rates at which the
    diagonal of R grows. What the vectors do before they have forgotten their beginning, during the
    spin-up time or a tenth of the averaging if that is longer, is not counted.

    Parameters
    ----------
    system : System
    count : int, optional
        How many, from the largest down; all N if left out. One alone is far the cheapest.
    length : float, optional
        Model time to average over, all members together, in ``time_units``; rounded up to whole
        blocks. The default is what 1.35e8 numbers (steps x variables x ``count``) amount to, and at
        least the spin-up in every member: seconds for small systems, minutes for all exponents of
        a system of hundreds of variables.
    members : int, optional
        Independent runs side by side. If left out, 9000 / (N ``count``), or fewer if the length
        is given and does not give each of them a time as long as the spin-up; at least 10.
    spin_up : float, optional
        Time to come onto the attractor, ``system.spin_up`` if left out. Every member then runs on
        to a moment of its own, within the time that vectors are given to forget their beginning.
    dt : float, optional
        Time step, ``system.step`` if left out.
    every : int, optional
        Steps from one orthonormalisation to the next: 5, or 20 for a single vector.
    seed : int
        Of the members' starts and of the first vectors.
    confidence : float
        Of the intervals.
    state : array (N,) or (members, N), optional
        Where to start from, before the spin-up. Members that share one state are scattered round
        it by a thousandth of its root mean square.
    progress : callable, optional
        Called with intervals done and in all.

    Returns
    -------
    Exponents

    Raises
    ------
    ArgumentError
        If an argument is out of range, more exponents are asked for than there are variables, a
        state stops being finite (the message says when and where), ``every`` is too large to keep
        vectors apart, or fewer than 10 members are too short for an interval.

    Notes
    -----
    The interval is Student's t over members, which are independent; no correlation time is needed.
    Members that start from one state without a spin-up are not: they may go through the same in
    step, and the interval is then as wide as for one of them.
    With fewer than 10 members it is Student's t over blocks of time, which count for less if
    neighbours are correlated. The error of the time step is added on both sides: twice
    the difference that half the step makes to the growth measured from the same states (its effect
    on where the run goes is not in it). Where the rates still fall like 1/t, as they do where
    errors grow by a power of time, the interval is widened by half as much again as the way to the
    limit extrapolated in 1/t.
    Members of a system with more than one attractor, or with islands, differ for ever; the mean is
    then that over the members.

    Source: Benettin et al. 1980, Meccanica 15 (from memory).

    Examples
    --------
    >>> from ensemble_horizon import toys
    >>> sink = toys.system("spiral-sink", decay=0.5)
    >>> found = lyapunov_exponents(sink, length=100.0)
    >>> found.exponents.round(5).tolist(), found.length
    ([-0.5, -0.5], 160.0)
    """
    size = system.size
    wanted = size if count is None else require_whole(count, "count")
    require_at_most(wanted, size, "count", f"variables of {system.name}", "take a smaller count")
    random = np.random.default_rng(require_whole(seed, "seed", 0))
    states = starting_states(system, wanted, members, state, length, random)
    plan = planned(
        system,
        wanted,
        len(states),
        length=length,
        spin_up=spin_up,
        dt=dt,
        every=(EVERY_ALONE if wanted == 1 else EVERY) if every is None else every,
        confidence=confidence,
        one_state=state is None or np.ndim(state) < 2,
    )
    orbits = members_ready(system, states, plan, random)
    first = random.standard_normal((len(states), wanted, size))
    carrier, _ = Tangents(system, orbits.states, orbits.times, first).standardised()
    return averaged(carrier, plan, progress)
