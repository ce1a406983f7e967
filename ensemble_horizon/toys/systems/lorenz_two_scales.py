"""Lorenz's 1996 system of two scales: slow sites round a circle, each with its fast ones."""

from __future__ import annotations

from dataclasses import dataclass
from typing import ClassVar

import numpy as np
import numpy.typing as npt
from scipy.linalg import block_diag

from ensemble_horizon.errors import ArgumentError
from ensemble_horizon.toys.correlation import ring_correlation
from ensemble_horizon.toys.dynamics import (
    Field,
    PublishedValue,
    System,
    Time,
    parameter,
    require_states,
)
from ensemble_horizon.toys.norms import Array
from ensemble_horizon.toys.systems.lorenz import Lorenz96
from ensemble_horizon.toys.systems.ring import (
    advection,
    advection_jacobian,
    advection_tangent,
    ring_coordinates,
)
from ensemble_horizon.vocabulary import CELL


@dataclass(frozen=True)
class LorenzTwoScales(System):
    """Slow values x_k with J fast values y_(j,k) each; the fast ones form one ring of K J.

    dx_k/dt = (x_(k+1) - x_(k-2)) x_(k-1) - x_k + F - (h c / b) sum over j of y_(j,k)
    dy_m/dt = c b (y_(m-1) - y_(m+2)) y_(m+1) - c y_m + (h c / b) x_k,  m = j + J k

    The fast values are about b times smaller and change c times faster. One unit of time stands
    for five days by the author's choice of scale. A state is the K slow values, then y_m in the
    order of m. Source: Lorenz 1996, ECMWF Seminar on Predictability, with these defaults (from
    memory).

    Examples
    --------
    >>> LorenzTwoScales().size
    396
    >>> rest = LorenzTwoScales(sites=8, coupling=0.0)
    >>> float(abs(rest.tendency([10.0] * 8 + [0.0] * 80)).max())
    0.0
    """

    sites: int = parameter(36, "1", "number of slow sites K", minimum=4, whole=True)
    fast_sites: int = parameter(
        10, "1", "number of fast values J of each slow site", minimum=1, whole=True
    )
    forcing: float = parameter(10.0, "1", "constant forcing F of the slow sites")
    coupling: float = parameter(1.0, "1", "coupling h of the scales", minimum=0.0)
    speed_ratio: float = parameter(10.0, "1", "c, how many times faster the fast are", above=0.0)
    size_ratio: float = parameter(10.0, "1", "b, how many times smaller the fast are", above=0.0)

    name: ClassVar[str] = "lorenz-96-two-scales"
    title: ClassVar[str] = "Lorenz 1996 in two scales: slow waves that carry fast, small ones"
    source: ClassVar[str] = "Lorenz 1996, ECMWF Seminar on Predictability (from memory)"
    step: ClassVar[float] = 0.005
    spin_up: ClassVar[float] = 10.0
    published: ClassVar[tuple[PublishedValue, ...]] = (
        PublishedValue(
            "sum_of_exponents", -3636.0, 1e-9, "-(K + c K J), the divergence (closed form)"
        ),
    )

    @property
    def variables(self) -> tuple[str, ...]:
        """Names x0, x1, ... of the slow values, y0_1, y0_2, ... of the fast ones of site 0, ..."""
        sites, fast = range(int(self.sites)), range(1, int(self.fast_sites) + 1)
        slow = tuple(f"x{site}" for site in sites)
        return slow + tuple(f"y{site}_{place}" for site in sites for place in fast)

    @property
    def size(self) -> int:
        """Number of variables, K (1 + J)."""
        return int(self.sites) * (1 + int(self.fast_sites))

    def default_state(self) -> Array:
        """Return the slow sites at F with one of them disturbed, the fast ones at zero."""
        state = np.zeros(self.size)
        state[: int(self.sites)] = self.forcing
        state[0] += 0.01
        return state

    def tendency(self, state: npt.ArrayLike, time: Time = 0.0) -> Array:
        """Return dx/dt and dy/dt (..., N)."""
        x, y = self._scales(np.asarray(state, dtype=float))
        change = self._linear(x, y)
        slow, fast = self._scales(change)
        slow += advection(x, x)
        slow += self.forcing
        fast += self.speed_ratio * self.size_ratio * advection(y, y, -1)
        return change

    def tangent(self, state: npt.ArrayLike, displacement: npt.ArrayLike, time: Time = 0.0) -> Array:
        """Return the linearised tendency (..., N) of ``displacement`` about ``state``."""
        x, y = self._scales(np.asarray(state, dtype=float))
        dx, dy = self._scales(np.asarray(displacement, dtype=float))
        around_slow = advection_tangent(x, dx)
        around_fast = advection_tangent(y, dy, -1)
        around_fast *= self.speed_ratio * self.size_ratio
        change = np.concatenate([around_slow, around_fast], axis=-1)
        change += self._linear(dx, dy)
        return change

    def jacobian(self, state: npt.ArrayLike, time: Time = 0.0) -> Array:
        """Return the derivatives of the tendency, (..., N, N)."""
        x, y = self._scales(np.asarray(state, dtype=float))
        slow, eye = int(self.sites), np.eye(self.size)
        matrix = np.empty((*x.shape[:-1], self.size, self.size))
        matrix[...] = self._linear(*self._scales(eye)).T
        matrix[..., :slow, :slow] += advection_jacobian(x)
        matrix[..., slow:, slow:] += self.speed_ratio * self.size_ratio * advection_jacobian(y, -1)
        return matrix

    def covariance(self, length: float) -> Array:
        """Return the covariance (N, N) of fields of length scale ``length``, in slow sites.

        Slow and fast values are independent of each other and vary alike; the J fast values of a
        site lie 1 / J apart.
        """
        slow = ring_correlation(int(self.sites), length)
        fast = int(self.fast_sites)
        return block_diag(slow, ring_correlation(int(self.sites) * fast, length * fast))

    def coordinates(self) -> dict[str, tuple[str, Array, dict[str, str]]]:
        """Return latitude and longitude of the slow sites, evenly round the circle."""
        return ring_coordinates(int(self.sites))

    def fields_of(self, states: npt.ArrayLike) -> tuple[Field, ...]:
        """Return the fields ``x``, the slow values, and ``y1``, ``y2``, ..., each over the sites.

        The fast values of a site are J fields rather than one field with a dimension of its own,
        so that each of them is read, gridded and drawn like any variable of a forecast.
        """
        x, y = self._scales(np.asarray(states, dtype=float))
        sectors = y.reshape(*x.shape, int(self.fast_sites))
        fast = tuple(
            Field(
                f"y{place + 1}",
                (CELL,),
                sectors[..., place],
                {"units": self.state_units, "long_name": f"fast value {place + 1} at the site"},
            )
            for place in range(int(self.fast_sites))
        )
        slow = {"units": self.state_units, "long_name": "slow value at the site"}
        return (Field("x", (CELL,), x, slow), *fast)

    def carried_over(self, states: npt.ArrayLike, other: System) -> Array:
        """Return the slow values as states of a one-scale `Lorenz96` of as many sites.

        Any other system must have the same variables. The way back, from one scale to two, is not
        open: the fast values would have to be invented.
        """
        if not isinstance(other, Lorenz96):
            return super().carried_over(states, other)
        array = require_states(self, states, "states")
        if other.sites != self.sites:
            raise ArgumentError(
                "other",
                expected=f"a {other.name} system of {int(self.sites)} sites",
                found=f"{int(other.sites)} sites",
                remedy=f"set its sites to {int(self.sites)}",
            )
        return self._scales(array)[0].copy()

    def _scales(self, state: Array) -> tuple[Array, Array]:
        slow = int(self.sites)
        return state[..., :slow], state[..., slow:]

    def _linear(self, x: Array, y: Array) -> Array:
        """Return damping and coupling of both scales, (..., N)."""
        strength = self.coupling * self.speed_ratio / self.size_ratio
        fast_sites = int(self.fast_sites)
        change = np.empty((*x.shape[:-1], self.size))
        slow, fast = self._scales(change)
        # A product with ones adds up short rows several times faster than a sum along them.
        sums = y.reshape(-1, fast_sites) @ np.full(fast_sites, strength)
        np.negative(sums.reshape(x.shape), out=slow)
        slow -= x
        np.multiply(y, -self.speed_ratio, out=fast)
        fast += np.repeat(strength * x, fast_sites, axis=-1)
        return change
