"""The run that measures growth rates, the same for tangent vectors and for pairs of runs."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from ensemble_horizon.checks import require_fraction, require_positive
from ensemble_horizon.toys.dynamics import System
from ensemble_horizon.toys.exponents.carrier import Carrier
from ensemble_horizon.toys.exponents.orbits import Orbits, spun_up, started
from ensemble_horizon.toys.exponents.record import Estimate, Exponents
from ensemble_horizon.toys.exponents.samples import measure
from ensemble_horizon.toys.norms import Array
from ensemble_horizon.toys.perturbations.method import require_whole

Progress = Callable[[int, int], None]

# Numbers (steps x variables x displacements) that a run of default length works through.
WORK = 1.35e8
# Numbers worked on at once: numpy's own overhead is small beside them, and they fit the cache.
TOGETHER = 9000
FEWEST_MEMBERS = 10
# Steps of the shortest run worth its transients, where there is no spin-up to go by.
SHORTEST_RUN = 1000
# Blocks of time that every run is cut into, a power of two.
BLOCKS = 32
FEWEST_BLOCKS = 8
# Displacements need this share of the averaging time, or the spin-up, to forget their beginning.
FORGETTING = 0.1
# Places at which growth is measured a second time with half the step, in how many members.
PLACES, PLACED = 32, 256


@dataclass(frozen=True)
class Plan:
    """How a measurement runs: times in model time, counts in intervals of ``every`` steps.

    ``in_step`` says that members start from one state without a spin-up to part in.
    """

    dt: float
    every: int
    confidence: float
    spin_up: float
    in_step: bool
    forgotten: int
    blocks: int
    per_block: int

    @property
    def interval(self) -> float:
        """Time from one standard form to the next."""
        return self.every * self.dt

    @property
    def counted(self) -> int:
        """Intervals that are averaged over."""
        return self.blocks * self.per_block


def planned(
    system: System,
    count: int,
    members: int,
    *,
    length: float | None,
    spin_up: float | None,
    dt: float | None,
    every: int,
    confidence: float,
    one_state: bool,
) -> Plan:
    """Return the plan for ``members`` runs that carry ``count`` displacements each.

    Raises
    ------
    ArgumentError
        If an argument is out of range.
    """
    step = system.step if dt is None else require_positive(dt, "dt")
    spin = system.spin_up if spin_up is None else require_positive(spin_up, "spin_up", zero=True)
    interval = require_whole(every, "every") * step
    if length is None:
        each = max(WORK / (system.size * count) * step / members, spin)
    else:
        each = require_positive(length, "length") / members
    # An interval that the time fills but for rounding is no reason for one more.
    intervals = max(int(np.ceil(each / interval - 1e-9)), FEWEST_BLOCKS)
    blocks = 2 ** int(np.log2(min(intervals, BLOCKS)))
    per_block = -(-intervals // blocks)
    forgetting = max(spin, FORGETTING * blocks * per_block * interval)
    forgotten = max(int(np.ceil(forgetting / interval)), 1)
    fraction = require_fraction(confidence, "confidence")
    return Plan(step, every, fraction, spin, one_state and spin == 0, forgotten, blocks, per_block)


def starting_states(
    system: System,
    count: int,
    members: int | None,
    state: npt.ArrayLike | None,
    length: float | None,
    random: np.random.Generator,
) -> Array:
    """Return as many states (M, N) as runs are asked for, before the spin-up.

    By default as many as a processor works on at its best, but none shorter than the spin-up.
    """
    if members is None and (state is None or np.ndim(state) < 2):
        most = TOGETHER / (system.size * count)
        if length is not None:
            shortest = max(system.spin_up, SHORTEST_RUN * system.step)
            most = min(most, require_positive(length, "length") / shortest)
        members = max(FEWEST_MEMBERS, int(most))
    elif members is not None:
        require_whole(members, "members")
    return started(system, state, members, random)


def members_ready(system: System, states: Array, plan: Plan, random: np.random.Generator) -> Orbits:
    """Return the members (M, N) after the spin-up."""
    steps, apart = round(plan.spin_up / plan.dt), plan.forgotten * plan.every
    return spun_up(system, states, steps, apart, plan.dt, random)


def averaged(carrier: Carrier, plan: Plan, progress: Progress | None) -> Exponents:
    """Carry the displacements along, and return the exponents that their growth amounts to."""
    members, count = carrier.displacements.shape[:2]
    total = plan.forgotten + plan.counted
    places = set(np.linspace(0, plan.counted - 1, min(PLACES, plan.counted)).astype(int).tolist())
    sums = np.zeros((members, plan.blocks, count))
    shifts = []
    for number in range(total):
        before, done = carrier, number * plan.every
        carrier, growth = before.carried(plan.every, plan.dt, done)
        if number >= plan.forgotten:
            place = number - plan.forgotten
            sums[:, place // plan.per_block] += growth
            if place in places:
                fine = before.first(PLACED).finer()
                _, finer = fine.carried(2 * plan.every, 0.5 * plan.dt, 2 * done)
                shifts.append(growth[:PLACED] - finer)
        if progress is not None:
            progress(number + 1, total)
    edges = plan.interval * (plan.forgotten + plan.per_block * np.arange(plan.blocks + 1.0))
    rates = _with_sum(sums) / (plan.per_block * plan.interval)
    shift = _with_sum(np.concatenate(shifts))
    systematic = _systematic(shift, count * carrier.rounding) / plan.interval
    return _recorded(carrier.system, rates, edges, systematic, plan)


def _systematic(shifts: Array, rounding: float) -> Array:
    """Return what time step and amplitude may change in ln growth per interval, (k,).

    ``shifts`` (S, k) are the differences between a step and half of it from the same start. The
    step's own error is 16/15 of that for a scheme of order four, the amplitude's is twice it.
    """
    error = shifts.std(axis=0) / np.sqrt(len(shifts))
    return np.asarray(2.0 * (np.abs(shifts.mean(axis=0)) + error) + rounding)


def _recorded(
    system: System, rates: Array, edges: Array, systematic: Array, plan: Plan
) -> Exponents:
    found = measure(rates, edges, plan.confidence, systematic, in_step=plan.in_step)
    low, high = found.mean - found.half_width, found.mean + found.half_width
    # The last column is the sum of the others.
    order = np.argsort(-found.mean[:-1], kind="stable")
    units = "1" if system.time_units == "1" else f"{system.time_units}-1"
    members = len(rates)
    return Exponents(
        system=system.name,
        exponents=found.mean[order],
        low=low[order],
        high=high[order],
        confidence=plan.confidence,
        length=members * plan.counted * plan.interval,
        time_units=system.time_units,
        hours_per_time_unit=system.hours_per_time_unit,
        size=system.size,
        covariance=found.covariance[np.ix_(order, order)],
        quantile=found.quantile,
        allowance=found.allowance[order],
        sum=Estimate(float(found.mean[-1]), float(low[-1]), float(high[-1]), units),
        members=members,
        step=plan.dt,
    )


def _with_sum(values: Array) -> Array:
    """Return ``values`` (..., k) with their sum as one more."""
    return np.concatenate([values, values.sum(axis=-1, keepdims=True)], axis=-1)
