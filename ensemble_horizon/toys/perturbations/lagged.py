"""Lagged starts: earlier analyses, run on to the time at which the ensemble starts."""

from __future__ import annotations

from dataclasses import dataclass
from typing import ClassVar

import numpy as np
import numpy.typing as npt

from ensemble_horizon.checks import require_positive
from ensemble_horizon.errors import ArgumentError
from ensemble_horizon.toys.dynamics import require_states
from ensemble_horizon.toys.integration import integrate
from ensemble_horizon.toys.norms import Array
from ensemble_horizon.toys.perturbations.method import (
    Perturbation,
    Start,
    require_at_most,
    steps_in,
)

# A run that ends this close to the control, relative to the control, is the control.
SAME_STATE = 1e-12


@dataclass(frozen=True, kw_only=True, eq=False)
class LaggedStarts(Perturbation):
    """Runs from earlier states, as they stand at the start.

    Member m is the run from ``past[m]``. With an amplitude its difference from the control is
    scaled to it; with ``amplitude=None`` it is taken as it is. The earlier states must be
    analyses, each with an error of its own: in a perfect model the run from an earlier state of
    the control comes back to the control, and is refused.

    Parameters
    ----------
    past : array (K, N)
        Earlier states, at least one per member (per pair, if paired).
    ages : sequence of K floats
        How long before the start each of them was valid, multiples of ``dt``.
    dt : float, optional
        Time step, ``system.step`` if left out.
    """

    past: npt.ArrayLike | None = None
    ages: npt.ArrayLike | None = None
    dt: float | None = None

    name: ClassVar[str] = "lagged"
    title: ClassVar[str] = "Lagged starts: earlier analyses run on to the start"
    source: ClassVar[str] = (
        "Hoffman and Kalnay 1983, Tellus 35A; scaled: Ebisuzaki and Kalnay 1991 (from memory)"
    )
    own_size: ClassVar[bool] = True
    nested: ClassVar[bool] = True

    def displacements(self, start: Start, members: int, random: np.random.Generator) -> Array:
        """Return run minus control (members, N)."""
        system = start.system
        past, ages = self._analyses(start)
        remedy = "give more of them, or ask for fewer members"
        require_at_most(members, len(past), "members", "earlier states given as past", remedy)
        dt = system.step if self.dt is None else require_positive(self.dt, "dt")
        least = SAME_STATE * float(start.measure.length(start.control))
        found = np.empty((members, system.size))
        for member in range(members):
            age = float(ages[member])
            steps = steps_in(age, dt, "ages")
            # One by one, so that rounding does not depend on how many members there are.
            run = integrate(system, past[member], steps, dt, steps, start.time - steps * dt)
            found[member] = run.states[-1] - start.control
            if float(start.measure.length(found[member])) <= least:
                raise ArgumentError(
                    f"past[{member}]",
                    expected="an analysis with an error of its own",
                    found=f"a state from which the run of {age:g} comes back to the control",
                    remedy="perturb the earlier states, or take method='bred-vectors'",
                )
        return found

    def _analyses(self, start: Start) -> tuple[Array, Array]:
        if self.past is None or self.ages is None:
            raise ArgumentError(
                "past" if self.past is None else "ages",
                expected="earlier states (K, N) as past and the times (K,) since then as ages",
                found="nothing",
                remedy="keep the analyses made before the start",
            )
        past = require_states(start.system, self.past, "past")
        ages = np.asarray(self.ages, dtype=float)
        usable = ages.ndim == 1 and np.all(np.isfinite(ages)) and np.all(ages > 0)
        if past.ndim != 2 or not usable or len(ages) != len(past):
            raise ArgumentError(
                "ages",
                expected="one time above zero per earlier state of past (K, N)",
                found=f"ages of shape {ages.shape}, past of shape {past.shape}",
                remedy="give as many ages as states",
            )
        return past, ages
