"""Runs by an adaptive scheme of high order: what the fixed-step schemes are held against."""

from __future__ import annotations

import numpy as np
import numpy.typing as npt
from scipy.integrate import DOP853

from ensemble_horizon.checks import require_increasing, require_positive
from ensemble_horizon.errors import ArgumentError
from ensemble_horizon.toys.dynamics import System, Time, require_states
from ensemble_horizon.toys.integration import Trajectory
from ensemble_horizon.toys.norms import Array


def integrate_adaptively(
    system: System,
    states: npt.ArrayLike,
    times: npt.ArrayLike,
    *,
    rtol: float = 1e-10,
    atol: float | None = None,
    time: Time = 0.0,
) -> Trajectory:
    """Run all ``states`` forward by scipy's DOP853, with steps fitted to a tolerance.

    Members are run one by one: each has the steps it needs, and none is run less accurately because
    the others are large or calm. That is slow, and meant for checks. The tolerances hold for one
    step; over a run the errors grow as the system makes them grow, so a chaotic run agrees with
    another only for as long as an error of ``rtol`` takes to become visible.

    Parameters
    ----------
    system : System
    states : array (..., N)
        Initial states; leading axes (members, starts) are free.
    times : array (K,)
        Times since the start at which to keep the states, in the system's ``time_units``: rising,
        none below 0.
    rtol, atol : float
        Tolerated error of a step: ``atol + rtol |x|`` for each variable x. ``atol`` is in units of
        the state; left out, it is ``rtol`` times the largest variable of the member's initial
        state.
    time : float or array
        Time of the initial states, as for `ensemble_horizon.toys.integration.integrate`.

    Returns
    -------
    Trajectory
        ``times`` (K,) as given and ``states`` (K, ..., N).

    Raises
    ------
    ArgumentError
        If an argument is out of range, or scipy gives up on a member: the message says which, when
        and why.

    Notes
    -----
    Dormand and Prince, order 8(5,3): Hairer, Norsett and Wanner 1993, Solving Ordinary Differential
    Equations I. States between steps come from its interpolation of order 7.

    Examples
    --------
    >>> from ensemble_horizon.toys.systems.spiral import SpiralSink
    >>> sink = SpiralSink(decay=1.0, rotation=0.0)
    >>> run = integrate_adaptively(sink, [[1.0, 0.0], [2.0, 0.0]], [0.0, 1.0])
    >>> run.states[-1].round(6).tolist()
    [[0.367879, 0.0], [0.735759, 0.0]]
    """
    initial = require_states(system, states, "states")
    span = _require_times(times)
    tolerance = require_positive(rtol, "rtol")
    if atol is not None:
        require_positive(atol, "atol", zero=True)
    starts = np.broadcast_to(np.asarray(time, dtype=float), initial.shape[:-1])
    kept = np.empty((span.size, *initial.shape))
    for place in np.ndindex(starts.shape):
        size = float(np.abs(initial[place]).max()) or 1.0
        absolute = tolerance * size if atol is None else atol
        kept[(slice(None), *place)] = _run_one(
            system, initial[place], span, float(starts[place]), (tolerance, absolute), place
        )
    return Trajectory(span, kept)


def _run_one(
    system: System,
    state: Array,
    times: Array,
    start: float,
    tolerances: tuple[float, float],
    place: tuple[int, ...],
) -> Array:
    """Return the states (K, N) of one member at ``times`` after ``start``."""
    kept = np.empty((times.size, system.size))
    # Where a tendency ends, numbers overflow before scipy notices; that is told below.
    with np.errstate(over="ignore", invalid="ignore", divide="ignore"):
        if not np.all(np.isfinite(system.tendency(state, start))):
            raise _gave_up(system, place, 0.0, "the tendency is not finite")
        # Time runs from 0, so that the last of ``times`` is met exactly.
        solver = DOP853(
            lambda t, x: system.tendency(x, start + t),
            0.0,
            state,
            times[-1],
            rtol=tolerances[0],
            atol=tolerances[1],
        )
        done = int(np.searchsorted(times, 0.0, side="right"))
        kept[:done] = state
        while solver.status == "running":
            message = solver.step()
            if solver.status == "failed":
                raise _gave_up(system, place, solver.t, message.rstrip(".").lower())
            reached = int(np.searchsorted(times, solver.t, side="right"))
            if reached > done:
                kept[done:reached] = solver.dense_output()(times[done:reached]).T
                done = reached
    return kept


def _require_times(times: npt.ArrayLike) -> Array:
    span = require_increasing(np.asarray(times, dtype=float), "times")
    if span.size == 0 or span[0] < 0.0:
        raise ArgumentError(
            "times",
            expected="at least one time, none before the start",
            found=f"{span[0]:g}" if span.size else "none",
            remedy="count times from the initial states, which are at 0",
        )
    return span


def _gave_up(system: System, place: tuple[int, ...], at: float, reason: str) -> ArgumentError:
    member = f" of member {tuple(int(i) for i in place)}" if place else ""
    return ArgumentError(
        f"integrate_adaptively({system.name})",
        expected="a run that stays within the tolerance to its end",
        found=f"the run{member} breaks off after time {at:g}: {reason}",
        remedy="end times before, or start from another state",
    )
