"""The van der Pol oscillator: a clock that forgets how it was started, except for the hour."""

from __future__ import annotations

from dataclasses import dataclass
from typing import ClassVar

import numpy as np
import numpy.typing as npt

from ensemble_horizon.toys.dynamics import PublishedValue, System, Time, parameter
from ensemble_horizon.toys.norms import Array

COMPUTED = "computed by an independent script for mu = 1, not taken from a publication"


@dataclass(frozen=True)
class VanDerPol(System):
    """dx/dt = y, dy/dt = mu (1 - x^2) y - x: every start but (0, 0) ends on one closed orbit.

    Errors across the orbit die away, errors along it stay: no chaos, no limit of predictability.
    Source: van der Pol 1926, Philosophical Magazine 2.

    Examples
    --------
    >>> VanDerPol(mu=2.0).tendency([2.0, 1.0]).tolist()
    [1.0, -8.0]
    """

    mu: float = parameter(1.0, "1", "strength of the nonlinear damping", above=0.0)

    name: ClassVar[str] = "van-der-pol"
    title: ClassVar[str] = "van der Pol oscillator: a closed orbit that all others run into"
    source: ClassVar[str] = "van der Pol 1926, Philosophical Magazine 2 (from memory)"
    step: ClassVar[float] = 0.02
    spin_up: ClassVar[float] = 30.0
    published: ClassVar[tuple[PublishedValue, ...]] = (
        PublishedValue("exponents", (0.0, -1.059), 0.01, COMPUTED),
        PublishedValue("period", 6.66329, 1e-5, COMPUTED),
    )

    @property
    def variables(self) -> tuple[str, ...]:
        """Names of the two variables."""
        return ("x", "y")

    def default_state(self) -> Array:
        """Return the point (2, 0), close to the orbit."""
        return np.array([2.0, 0.0])

    def tendency(self, state: npt.ArrayLike, time: Time = 0.0) -> Array:
        """Return dx/dt (..., 2)."""
        states = np.asarray(state, dtype=float)
        x, y = states[..., 0], states[..., 1]
        change = np.empty_like(states)
        change[..., 0] = y
        change[..., 1] = self.mu * (1.0 - x**2) * y - x
        return change

    def tangent(self, state: npt.ArrayLike, displacement: npt.ArrayLike, time: Time = 0.0) -> Array:
        """Return the linearised tendency (..., 2) of ``displacement`` about ``state``."""
        states, moved = np.asarray(state, dtype=float), np.asarray(displacement, dtype=float)
        x, y = states[..., 0], states[..., 1]
        dx, dy = moved[..., 0], moved[..., 1]
        change = np.empty(np.broadcast_shapes(states.shape, moved.shape))
        change[..., 0] = dy
        change[..., 1] = self.mu * (1.0 - x**2) * dy - (1.0 + 2.0 * self.mu * x * y) * dx
        return change

    def jacobian(self, state: npt.ArrayLike, time: Time = 0.0) -> Array:
        """Return the derivatives of the tendency, (..., 2, 2)."""
        states = np.asarray(state, dtype=float)
        x, y = states[..., 0], states[..., 1]
        matrix = np.zeros((*states.shape, 2))
        matrix[..., 0, 1] = 1.0
        matrix[..., 1, 0] = -1.0 - 2.0 * self.mu * x * y
        matrix[..., 1, 1] = self.mu * (1.0 - x**2)
        return matrix
