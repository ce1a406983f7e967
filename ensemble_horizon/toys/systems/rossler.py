"""Rossler's system: the simplest flow with a folded band of chaos."""

from __future__ import annotations

from dataclasses import dataclass
from typing import ClassVar

import numpy as np
import numpy.typing as npt

from ensemble_horizon.toys.dynamics import PublishedValue, System, Time, parameter
from ensemble_horizon.toys.norms import Array

SPROTT = "Sprott 2003, Chaos and Time-Series Analysis, for 0.2, 0.2, 5.7 (from memory)"


@dataclass(frozen=True)
class Rossler(System):
    """dx/dt = -y - z, dy/dt = x + a y, dz/dt = b + z (x - c).

    Source: Rossler 1976, Phys. Lett. A 57, 397-398.

    Examples
    --------
    >>> Rossler().tendency([1.0, 1.0, 1.0]).round(4).tolist()
    [-2.0, 1.2, -4.5]
    """

    a: float = parameter(0.2, "1", "growth a of the oscillation")
    b: float = parameter(0.2, "1", "source b of the third variable")
    c: float = parameter(5.7, "1", "threshold c beyond which the band folds")

    name: ClassVar[str] = "rossler"
    title: ClassVar[str] = "Rossler 1976: a folded band, weakly chaotic"
    source: ClassVar[str] = "Rossler 1976, Phys. Lett. A 57"
    step: ClassVar[float] = 0.04
    spin_up: ClassVar[float] = 100.0
    published: ClassVar[tuple[PublishedValue, ...]] = (
        PublishedValue("leading_exponent", 0.0714, 0.004, SPROTT),
        PublishedValue("exponents", (0.0714, 0.0, -5.394), 0.02, SPROTT),
        PublishedValue("dimension", 2.013, 0.002, SPROTT),
    )

    @property
    def variables(self) -> tuple[str, ...]:
        """Names of the three variables."""
        return ("x", "y", "z")

    def default_state(self) -> Array:
        """Return a point on the flat part of the band, (0, -5, 0)."""
        return np.array([0.0, -5.0, 0.0])

    def tendency(self, state: npt.ArrayLike, time: Time = 0.0) -> Array:
        """Return dx/dt (..., 3)."""
        states = np.asarray(state, dtype=float)
        x, y, z = (states[..., i] for i in range(3))
        change = np.empty_like(states)
        change[..., 0] = -y - z
        change[..., 1] = x + self.a * y
        change[..., 2] = self.b + z * (x - self.c)
        return change

    def tangent(self, state: npt.ArrayLike, displacement: npt.ArrayLike, time: Time = 0.0) -> Array:
        """Return the linearised tendency (..., 3) of ``displacement`` about ``state``."""
        states, moved = np.asarray(state, dtype=float), np.asarray(displacement, dtype=float)
        dx, dy, dz = (moved[..., i] for i in range(3))
        change = np.empty(np.broadcast_shapes(states.shape, moved.shape))
        change[..., 0] = -dy - dz
        change[..., 1] = dx + self.a * dy
        change[..., 2] = states[..., 2] * dx + (states[..., 0] - self.c) * dz
        return change

    def jacobian(self, state: npt.ArrayLike, time: Time = 0.0) -> Array:
        """Return the derivatives of the tendency, (..., 3, 3)."""
        states = np.asarray(state, dtype=float)
        matrix = np.zeros((*states.shape, 3))
        matrix[..., 0, 1:] = -1.0
        matrix[..., 1, 0] = 1.0
        matrix[..., 1, 1] = self.a
        matrix[..., 2, 0] = states[..., 2]
        matrix[..., 2, 2] = states[..., 0] - self.c
        return matrix
