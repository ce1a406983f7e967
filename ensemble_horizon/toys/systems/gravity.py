"""Bodies that attract each other by gravity: what all systems of the family have in common.

With masses m and positions r, in two dimensions or three:

    d2(r_i)/dt2 = G sum over j of m_j (r_j - r_i) / (|r_j - r_i|^2 + s^2)^(3/2)

Source: Newton 1687, Principia; a softening length s above 0 (Aarseth 1963, Mon. Not. R. Astron.
Soc. 126, from memory) takes the edge off close encounters.
"""

from __future__ import annotations

from abc import abstractmethod
from functools import lru_cache
from typing import ClassVar

import numpy as np
import numpy.typing as npt

from ensemble_horizon.toys.mechanics import SplitSystem
from ensemble_horizon.toys.norms import Array, Norm, scaled


class GravitatingBodies(SplitSystem):
    """B bodies in D dimensions; a state is x of all bodies, then y, (z,) and their velocities.

    Energy, momentum and angular momentum stay constant, and so does the volume of any set of
    states: there is no attractor to settle on. Where two bodies meet and s = 0 the equations end.

    A norm of a displacement has to join positions and velocities. It counts a velocity by the way
    it makes in one unit of time; a norm of the positions alone would call two states equal that
    part at once, so none is offered.
    """

    dimensions: ClassVar[int]
    gravity: ClassVar[float] = 1.0
    velocity_units: ClassVar[str] = "1"
    scheme: ClassVar[str] = "symplectic"
    softening: float

    @property
    @abstractmethod
    def masses(self) -> tuple[float, ...]:
        """Masses of the B bodies, in units such that `gravity` is the constant G."""

    @property
    def variables(self) -> tuple[str, ...]:
        """Names such as x1 and y1 for the place of the first body, vx1 and vy1 for its velocity."""
        axes = "xyz"[: self.dimensions]
        numbers = range(1, len(self.masses) + 1)
        return tuple(f"{kind}{axis}{n}" for kind in ("", "v") for axis in axes for n in numbers)

    @property
    def units_of_variables(self) -> tuple[str, ...]:
        """Units of positions, then of velocities."""
        half = self.dimensions * len(self.masses)
        return (self.state_units,) * half + (self.velocity_units,) * half

    def norms(self) -> dict[str, Norm]:
        """Return the norms of displacements d of positions and e of velocities.

        ``euclidean`` is the root of the sum of all d^2 + (e tau)^2 with tau one unit of time;
        ``area-weighted`` is the root of its mean over the bodies.
        """
        counted = "with velocities counted by the way they make in one unit of time"
        one = np.ones(self.size)
        mean = one / np.sqrt(len(self.masses))
        sums, means = "root of the sum of squares", "root mean square over the bodies"
        return {
            "euclidean": scaled("euclidean", self.state_units, f"{sums}, {counted}", one),
            "area-weighted": scaled("area-weighted", self.state_units, f"{means}, {counted}", mean),
        }

    def energy(self, state: npt.ArrayLike) -> Array:
        """Return the sum of kinetic and potential energy (...) of states (..., N)."""
        positions, velocities = self.split(state)
        masses = np.array(self.masses)
        first, second = np.triu_indices(len(masses), 1)
        distance = np.sqrt(self._squares(self._differences(positions)))
        kinetic = 0.5 * (masses * self._by_axis(velocities) ** 2).sum(axis=(-2, -1))
        bound = self.gravity * (masses[first] * masses[second] / distance).sum(axis=-1)
        return np.asarray(kinetic - bound)

    def angular_momentum(self, state: npt.ArrayLike) -> Array:
        """Return the angular momentum about the origin, (..., 3), or (..., 1) in two dimensions."""
        r, v = (self._by_axis(part) for part in self.split(state))
        planes = [(0, 1)] if self.dimensions == 2 else [(1, 2), (2, 0), (0, 1)]
        parts = [r[..., a, :] * v[..., b, :] - r[..., b, :] * v[..., a, :] for a, b in planes]
        return np.stack(parts, axis=-2) @ np.array(self.masses)

    def centre_of_mass(self, state: npt.ArrayLike) -> tuple[Array, Array]:
        """Return position and velocity (..., D) of the centre of mass."""
        share = np.array(self.masses) / sum(self.masses)
        positions, velocities = (self._by_axis(part) @ share for part in self.split(state))
        return positions, velocities

    def acceleration(self, positions: npt.ArrayLike) -> Array:
        """Return the accelerations (..., D B) at ``positions`` (..., D B)."""
        apart = self._differences(positions)
        square = self._squares(apart)[..., None, :]
        return self._on_bodies(apart / (square * np.sqrt(square)))

    def acceleration_tangent(self, positions: npt.ArrayLike, displacement: npt.ArrayLike) -> Array:
        """Return the derivative of the accelerations, applied to ``displacement``: (..., D B)."""
        apart, moved = self._differences(positions), self._differences(displacement)
        square = self._squares(apart)[..., None, :]
        along = (apart * moved).sum(axis=-2, keepdims=True)
        return self._on_bodies((moved - 3.0 * along / square * apart) / (square * np.sqrt(square)))

    def acceleration_gradient(self, positions: npt.ArrayLike) -> Array:
        """Return the derivatives of the accelerations, (..., D B, D B)."""
        apart = self._differences(positions)
        square = self._squares(apart)[..., None, None, :]
        outer = apart[..., :, None, :] * apart[..., None, :, :]
        unit = np.eye(self.dimensions)[..., None]
        tides = (unit - 3.0 * outer / square) / (square * np.sqrt(square))
        difference, pull = _pairs(self.masses, self.gravity)
        blocks = np.einsum("pi,...ckp,jp->...cikj", pull, tides, difference)
        size = self.dimensions * len(self.masses)
        return np.asarray(blocks.reshape(*blocks.shape[:-4], size, size))

    def _by_axis(self, coordinates: npt.ArrayLike) -> Array:
        """Return coordinates (..., D B) as (..., D, B)."""
        array = np.asarray(coordinates, dtype=float)
        return array.reshape(*array.shape[:-1], self.dimensions, len(self.masses))

    def _differences(self, coordinates: npt.ArrayLike) -> Array:
        """Return second minus first body of every pair, (..., D, P)."""
        by_axis = self._by_axis(coordinates)
        # One flat product: numpy would go through the members of a stack one by one.
        flat = by_axis.reshape(-1, len(self.masses)) @ _pairs(self.masses, self.gravity)[0]
        return np.asarray(flat.reshape(*by_axis.shape[:-1], -1))

    def _squares(self, apart: Array) -> Array:
        """Return the squared distance of every pair (..., P), softened."""
        return np.asarray((apart * apart).sum(axis=-2) + self.softening**2)

    def _on_bodies(self, pulls: Array) -> Array:
        """Return what pulls (..., D, P) between pairs do to the bodies, (..., D B)."""
        flat = pulls.reshape(-1, pulls.shape[-1]) @ _pairs(self.masses, self.gravity)[1]
        return np.asarray(flat.reshape(*pulls.shape[:-2], -1))


@lru_cache(maxsize=64)
def _pairs(masses: tuple[float, ...], gravity: float) -> tuple[Array, Array]:
    """Return two matrices: bodies to differences of pairs (B, P), pulls of pairs to bodies (P, B).

    Products with them do a whole ensemble in one call, and a pair never pulls at its own centre of
    mass.
    """
    first, second = np.triu_indices(len(masses), 1)
    pairs = np.arange(first.size)
    difference, pull = np.zeros((len(masses), first.size)), np.zeros((first.size, len(masses)))
    difference[first, pairs], difference[second, pairs] = -1.0, 1.0
    weight = gravity * np.array(masses)
    pull[pairs, first], pull[pairs, second] = weight[second], -weight[first]
    return difference, pull
