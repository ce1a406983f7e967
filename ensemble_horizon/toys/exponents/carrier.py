"""What is carried along a run to measure growth: tangent vectors, or a second run."""

from __future__ import annotations

from abc import ABC, abstractmethod
from dataclasses import dataclass, replace

import numpy as np

from ensemble_horizon.errors import ArgumentError
from ensemble_horizon.toys.dynamics import System
from ensemble_horizon.toys.integration import blown_up
from ensemble_horizon.toys.norms import Array
from ensemble_horizon.toys.schemes import step, tangent_step

# Below this share of the fastest growth between two orthonormalisations, fewer than five digits of
# the slowest are left.
NARROWEST = 1e-11
EPSILON = float(np.finfo(float).eps)


@dataclass(frozen=True, eq=False)
class Carrier(ABC):
    """Members' states (M, N) at their times (M,), and displacements (M, k, N) from them."""

    system: System
    states: Array
    times: Array
    displacements: Array

    def first(self, members: int) -> Carrier:
        """Return the first ``members`` of them alone."""
        return replace(
            self,
            states=self.states[:members],
            times=self.times[:members],
            displacements=self.displacements[:members],
        )

    def carried(self, steps: int, dt: float, done: int = 0) -> tuple[Carrier, Array]:
        """Return the carrier after ``steps``, brought to standard form, and growth ln (M, k).

        ``done`` steps of the run lie behind, for the message if a state stops being finite.
        """
        # Overflow is looked for right below, where it can be told with its time and place.
        with np.errstate(over="ignore", invalid="ignore"):
            moved = self
            for number in range(1, steps + 1):
                moved = moved.advanced(dt)
                if not np.all(np.isfinite(moved.states)):
                    raise blown_up(self.system, moved.states, done + number, dt)
            return moved.standardised()

    def finer(self) -> Carrier:
        """Return the carrier with what is finite about its displacements halved."""
        return self

    @property
    @abstractmethod
    def rounding(self) -> float:
        """Error of ln growth between two standard forms that rounding may make."""

    @abstractmethod
    def advanced(self, dt: float) -> Carrier:
        """Return the carrier one step of ``dt`` later."""

    @abstractmethod
    def standardised(self) -> tuple[Carrier, Array]:
        """Return the carrier in standard form, and ln (M, k) of the factors taken out."""


class Tangents(Carrier):
    """Infinitesimal displacements, orthonormal in standard form."""

    @property
    def rounding(self) -> float:
        """A few units in the last place of a vector's length."""
        return 4.0 * EPSILON * float(np.sqrt(self.system.size))

    def advanced(self, dt: float) -> Carrier:
        """Return state and tangent vectors after one step."""
        later, moved = tangent_step(
            self.system, self.states[:, None], self.displacements, dt, self.times[:, None]
        )
        return Tangents(self.system, later[:, 0], self.times + dt, moved)

    def standardised(self) -> tuple[Carrier, Array]:
        """Return orthonormal vectors, the first j of which span what the first j did."""
        vectors = self.displacements
        if vectors.shape[1] == 1:
            length = np.linalg.norm(vectors, axis=-1)
            factors, unit = length, vectors / np.where(length > 0, length, 1.0)[..., None]
        else:
            if not np.all(np.isfinite(vectors)):
                raise _lost(self.system, "tangent vectors that are not finite")
            turned = np.linalg.qr(np.swapaxes(vectors, -1, -2))
            factors = np.abs(np.diagonal(turned.R, axis1=-2, axis2=-1))
            unit = np.ascontiguousarray(np.swapaxes(turned.Q, -1, -2))
        narrow = factors.min(axis=-1) < NARROWEST * factors.max(axis=-1)
        if np.any(narrow) or not np.all(np.isfinite(factors)) or not np.all(factors > 0):
            raise _lost(self.system, "tangent vectors that have come to lie in fewer directions")
        return replace(self, displacements=unit), np.log(factors)


@dataclass(frozen=True, eq=False)
class Pairs(Carrier):
    """Finite displacements (M, 1, N) to a second run, of length ``amplitude`` in standard form."""

    amplitude: float

    def finer(self) -> Carrier:
        """Return pairs half as far apart."""
        return replace(self, displacements=0.5 * self.displacements, amplitude=0.5 * self.amplitude)

    @property
    def rounding(self) -> float:
        """Rounding of the states, relative to the distance between the two runs."""
        return 4.0 * EPSILON * float(np.abs(self.states).max()) / self.amplitude

    def advanced(self, dt: float) -> Carrier:
        """Return both runs after one step."""
        both = np.stack([self.states, self.states + self.displacements[:, 0]])
        control, other = step(self.system, both, dt, self.times)
        return replace(
            self,
            states=control,
            times=self.times + dt,
            displacements=(other - control)[:, None],
        )

    def standardised(self) -> tuple[Carrier, Array]:
        """Return displacements scaled back to the amplitude."""
        length = np.linalg.norm(self.displacements, axis=-1)
        if not np.all(np.isfinite(length)) or not np.all(length > 0):
            raise ArgumentError(
                f"pairs of runs of {self.system.name}",
                expected="two runs that differ",
                found=f"amplitude {self.amplitude:g} has sunk below rounding",
                remedy="take a larger amplitude or a smaller every",
            )
        factors = length / self.amplitude
        return replace(self, displacements=self.displacements / factors[..., None]), np.log(factors)


def _lost(system: System, found: str) -> ArgumentError:
    return ArgumentError(
        "every",
        expected=f"so few steps of {system.name} that its tangent vectors stay apart",
        found=found,
        remedy="orthonormalise more often: take a smaller every, or a shorter dt",
    )
