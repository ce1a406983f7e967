"""Systems of mechanics: positions and velocities, moved by forces that depend on the positions."""

from __future__ import annotations

from abc import abstractmethod

import numpy as np
import numpy.typing as npt

from ensemble_horizon.toys.dynamics import System, Time
from ensemble_horizon.toys.norms import Array


class SplitSystem(System):
    """A system that splits: a state holds all positions x, then all velocities v.

        dx/dt = v,  dv/dt = a(x)

    With N = 2 M variables, the three methods that a subclass gives work on arrays (..., M).
    Positions and velocities can then be advanced in turn, each exactly while the other stands
    still: that is what a symplectic scheme needs.
    """

    @abstractmethod
    def acceleration(self, positions: npt.ArrayLike) -> Array:
        """Return a(x) (..., M) at ``positions`` (..., M)."""

    @abstractmethod
    def acceleration_tangent(self, positions: npt.ArrayLike, displacement: npt.ArrayLike) -> Array:
        """Return the derivative of a at ``positions``, applied to ``displacement``: (..., M)."""

    @abstractmethod
    def acceleration_gradient(self, positions: npt.ArrayLike) -> Array:
        """Return the derivatives of a at ``positions``, (..., M, M)."""

    def split(self, state: npt.ArrayLike) -> tuple[Array, Array]:
        """Return positions and velocities (..., M) of states or displacements (..., N)."""
        array = np.asarray(state, dtype=float)
        half = self.size // 2
        return array[..., :half], array[..., half:]

    def tendency(self, state: npt.ArrayLike, time: Time = 0.0) -> Array:
        """Return velocities, then accelerations (..., N)."""
        positions, velocities = self.split(state)
        return np.concatenate([velocities, self.acceleration(positions)], axis=-1)

    def tangent(self, state: npt.ArrayLike, displacement: npt.ArrayLike, time: Time = 0.0) -> Array:
        """Return the linearised tendency (..., N) of ``displacement`` about ``state``."""
        positions, _ = self.split(state)
        moved, faster = self.split(displacement)
        change = self.acceleration_tangent(positions, moved)
        return np.concatenate([np.broadcast_to(faster, change.shape), change], axis=-1)

    def jacobian(self, state: npt.ArrayLike, time: Time = 0.0) -> Array:
        """Return the derivatives of the tendency, (..., N, N)."""
        gradient = self.acceleration_gradient(self.split(state)[0])
        half = gradient.shape[-1]
        matrix = np.zeros((*gradient.shape[:-2], 2 * half, 2 * half))
        matrix[..., :half, half:] = np.eye(half)
        matrix[..., half:, :half] = gradient
        return matrix
