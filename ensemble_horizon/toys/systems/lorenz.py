"""Lorenz's two systems: convection (1963) and a latitude circle (1996)."""

from __future__ import annotations

from dataclasses import dataclass
from typing import ClassVar

import numpy as np
import numpy.typing as npt

from ensemble_horizon.toys.correlation import ring_correlation
from ensemble_horizon.toys.dynamics import Field, PublishedValue, System, Time, parameter
from ensemble_horizon.toys.norms import Array
from ensemble_horizon.toys.systems.ring import (
    advection,
    advection_jacobian,
    advection_tangent,
    ring_coordinates,
)
from ensemble_horizon.vocabulary import CELL

SPROTT = "Sprott, Chaos and Time-Series Analysis, numerical values (from memory)"
WOLF = "Wolf et al. 1985, Physica D 16 (from memory)"
LORENZ_EMANUEL = "Lorenz and Emanuel 1998, J. Atmos. Sci. 55 (from memory)"
DIVERGENCE = "mean divergence of the flow (closed form)"


@dataclass(frozen=True)
class Lorenz63(System):
    """dx/dt = sigma (y - x), dy/dt = x (rho - z) - y, dz/dt = x y - beta z.

    Source: Lorenz 1963, J. Atmos. Sci. 20, 130-141.

    Examples
    --------
    >>> Lorenz63().tendency([1.0, 1.0, 1.0]).round(4).tolist()
    [0.0, 26.0, -1.6667]
    """

    sigma: float = parameter(10.0, "1", "Prandtl number", above=0.0)
    rho: float = parameter(28.0, "1", "Rayleigh number over its critical value", above=0.0)
    beta: float = parameter(8.0 / 3.0, "1", "aspect of the rolls", above=0.0)

    name: ClassVar[str] = "lorenz-63"
    title: ClassVar[str] = "Lorenz 1963: convection in three variables"
    source: ClassVar[str] = "Lorenz 1963, J. Atmos. Sci. 20"
    step: ClassVar[float] = 0.01
    spin_up: ClassVar[float] = 20.0
    published: ClassVar[tuple[PublishedValue, ...]] = (
        PublishedValue("leading_exponent", 0.906, 0.02, SPROTT),
        PublishedValue("exponents", (0.906, 0.0, -14.572), 0.02, SPROTT),
        PublishedValue("dimension", 2.062, 0.01, SPROTT),
        PublishedValue("sum_of_exponents", -41.0 / 3.0, 1e-9, DIVERGENCE),
        PublishedValue(
            "leading_exponent", 1.50, 0.03, WOLF, (("sigma", 16.0), ("rho", 45.92), ("beta", 4.0))
        ),
    )

    @property
    def variables(self) -> tuple[str, ...]:
        """Names of the three variables."""
        return ("x", "y", "z")

    def default_state(self) -> Array:
        """Return the start of Lorenz's own integration, (0, 1, 0)."""
        return np.array([0.0, 1.0, 0.0])

    def tendency(self, state: npt.ArrayLike, time: Time = 0.0) -> Array:
        """Return dx/dt (..., 3)."""
        states = np.asarray(state, dtype=float)
        change = np.empty_like(states)
        x, y, z = (states[..., i] for i in range(3))
        slope = np.empty_like(x)
        np.subtract(y, x, out=slope)
        np.multiply(slope, self.sigma, out=change[..., 0])
        np.subtract(self.rho, z, out=slope)
        slope *= x
        np.subtract(slope, y, out=change[..., 1])
        np.multiply(x, y, out=slope)
        np.subtract(slope, self.beta * z, out=change[..., 2])
        return change

    def tangent(self, state: npt.ArrayLike, displacement: npt.ArrayLike, time: Time = 0.0) -> Array:
        """Return the linearised tendency (..., 3) of ``displacement`` about ``state``."""
        states, moved = np.asarray(state, dtype=float), np.asarray(displacement, dtype=float)
        x, y, z = (states[..., i] for i in range(3))
        dx, dy, dz = (moved[..., i] for i in range(3))
        shape = np.broadcast_shapes(states.shape, moved.shape)
        change = np.empty_like(moved) if moved.shape == shape else np.empty(shape)
        change[..., 0] = self.sigma * (dy - dx)
        slope = np.empty_like(change[..., 0])
        np.multiply(self.rho - z, dx, out=slope)
        slope -= dy
        np.subtract(slope, x * dz, out=change[..., 1])
        np.multiply(y, dx, out=slope)
        slope += x * dy
        np.subtract(slope, self.beta * dz, out=change[..., 2])
        return change

    def jacobian(self, state: npt.ArrayLike, time: Time = 0.0) -> Array:
        """Return the derivatives of the tendency, (..., 3, 3)."""
        x, y, z = np.moveaxis(np.asarray(state, dtype=float), -1, 0)
        matrix = np.zeros((*x.shape, 3, 3))
        matrix[..., 0, 0] = -self.sigma
        matrix[..., 0, 1] = self.sigma
        matrix[..., 1, 0] = self.rho - z
        matrix[..., 1, 1] = -1.0
        matrix[..., 1, 2] = -x
        matrix[..., 2, 0] = y
        matrix[..., 2, 1] = x
        matrix[..., 2, 2] = -self.beta
        return matrix


@dataclass(frozen=True)
class Lorenz96(System):
    """dx_k/dt = (x_(k+1) - x_(k-2)) x_(k-1) - x_k + F on a ring of sites.

    One unit of time stands for five days by the authors' choice of scale; runs are labelled with
    non-dimensional time all the same. Sites are laid on the circle of 45 degrees north.
    Source: Lorenz 1996, ECMWF Seminar on Predictability; Lorenz and Emanuel 1998.

    Examples
    --------
    >>> float(abs(Lorenz96().tendency([8.0] * 40)).max())
    0.0
    """

    sites: int = parameter(40, "1", "number of sites on the ring", minimum=4, whole=True)
    forcing: float = parameter(8.0, "1", "constant forcing F")

    name: ClassVar[str] = "lorenz-96"
    title: ClassVar[str] = "Lorenz 1996: waves on a latitude circle"
    source: ClassVar[str] = "Lorenz and Emanuel 1998, J. Atmos. Sci. 55"
    step: ClassVar[float] = 0.05
    spin_up: ClassVar[float] = 20.0
    published: ClassVar[tuple[PublishedValue, ...]] = (
        PublishedValue("leading_exponent", 1.685, 0.03, LORENZ_EMANUEL),
        PublishedValue("positive_exponents", 13, 0, LORENZ_EMANUEL),
        PublishedValue("dimension", 27.0, 0.3, LORENZ_EMANUEL),
        PublishedValue("sum_of_exponents", -40.0, 1e-9, DIVERGENCE),
    )

    @property
    def variables(self) -> tuple[str, ...]:
        """Names of the sites' values, x0, x1, ..."""
        return tuple(f"x{site}" for site in range(int(self.sites)))

    def default_state(self) -> Array:
        """Return the resting state x = F with one site disturbed."""
        state = np.full(int(self.sites), float(self.forcing))
        state[0] += 0.01
        return state

    def tendency(self, state: npt.ArrayLike, time: Time = 0.0) -> Array:
        """Return dx/dt (..., sites)."""
        x = np.asarray(state, dtype=float)
        change = advection(x, x)
        change -= x
        change += self.forcing
        return change

    def tangent(self, state: npt.ArrayLike, displacement: npt.ArrayLike, time: Time = 0.0) -> Array:
        """Return the linearised tendency (..., sites) of ``displacement`` about ``state``."""
        moved = np.asarray(displacement, dtype=float)
        change = advection_tangent(np.asarray(state, dtype=float), moved)
        change -= moved
        return change

    def jacobian(self, state: npt.ArrayLike, time: Time = 0.0) -> Array:
        """Return the derivatives of the tendency, (..., sites, sites)."""
        return advection_jacobian(np.asarray(state, dtype=float)) - np.eye(int(self.sites))

    def covariance(self, length: float) -> Array:
        """Return the correlation (sites, sites) at the length scale ``length``, in sites."""
        return ring_correlation(int(self.sites), length)

    def coordinates(self) -> dict[str, tuple[str, Array, dict[str, str]]]:
        """Return latitude and longitude of the sites, evenly round the circle."""
        return ring_coordinates(int(self.sites))

    def fields_of(self, states: npt.ArrayLike) -> tuple[Field, ...]:
        """Return one field ``x`` over the sites."""
        values = np.asarray(states, dtype=float)
        attributes = {"units": self.state_units, "long_name": "value at the site"}
        return (Field("x", (CELL,), values, attributes),)
