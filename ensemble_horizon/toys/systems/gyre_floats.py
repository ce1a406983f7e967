"""Floats that drift in two gyres whose common border swings to and fro.

In units of the basin's height H, on 0 <= x <= 2 and 0 <= y <= 1, with T the period of the forcing:

    psi = (U H / pi) sin(pi f) sin(pi y),  f = e x^2 + (1 - 2 e) x,  e = eps sin(2 pi t / T)
    u = -d(psi)/dy,  v = d(psi)/dx

Source: Shadden, Lekien and Marsden 2005, Physica D 212 (from memory). Their case A = 0.1,
eps = 0.25, omega = 2 pi / 10 is the default here, with 50 km for their unit of length and a day for
their unit of time.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import ClassVar

import numpy as np
import numpy.typing as npt

from ensemble_horizon.checks import require_positive
from ensemble_horizon.errors import ArgumentError
from ensemble_horizon.toys.correlation import gaussian_correlation
from ensemble_horizon.toys.dynamics import Field, PublishedValue, System, Time, parameter
from ensemble_horizon.toys.norms import Array, Norm, scaled
from ensemble_horizon.vocabulary import COORDINATE_ATTRIBUTES, LATITUDE, LONGITUDE

EARTH_RADIUS = 6.371e6
SECONDS_PER_DAY = 86400.0
# pi A in units of length and time above.
PUBLISHED_SPEED = np.pi * 0.1 * 5.0e4 / SECONDS_PER_DAY


@dataclass(frozen=True)
class GyreFloats(System):
    """K floats in the double gyre; a state is x of all floats, then y of all floats, in metres.

    The flow is given, so it is the place of a float that cannot be foretold, and how long depends
    on where it is released. Floats are released at the middles of ``rows`` x ``columns`` equal
    fields of the basin, counted row by row from the south-western corner. No water crosses the
    walls; a float set outside them by a perturbation drifts in the mirrored flow beyond. Time is in
    days and matters: at time 0 the border of the gyres stands in the middle, about to move east.

    Examples
    --------
    >>> floats = GyreFloats(rows=3, columns=6)
    >>> floats.size, floats.default_state()[[0, 5, 18]].round().tolist()
    (36, [8333.0, 91667.0, 8333.0])
    >>> u, v = floats.velocity(50e3, 0.0, time=0.0)
    >>> float(u.round(3)), float(v.round(3))
    (-0.0, -0.0)
    """

    rows: int = parameter(2, "1", "release points across the basin", minimum=1, whole=True)
    columns: int = parameter(4, "1", "release points along the basin", minimum=1, whole=True)
    height: float = parameter(5.0e4, "m", "height H of the basin, 2 H long", above=0.0)
    speed: float = parameter(
        PUBLISHED_SPEED, "m s-1", "greatest speed U along the southern and northern wall", above=0.0
    )
    period: float = parameter(10.0, "day", "period T of the forcing", above=0.0)
    swing: float = parameter(0.25, "1", "amplitude eps of the border's swing", minimum=0.0)
    latitude: float = parameter(
        -45.0, "degrees_north", "latitude of the south-western corner", above=-89.0, below=89.0
    )
    longitude: float = parameter(-140.0, "degrees_east", "longitude of the south-western corner")

    name: ClassVar[str] = "double-gyre-floats"
    title: ClassVar[str] = "Floats adrift in a double gyre whose border swings"
    source: ClassVar[str] = "Shadden, Lekien and Marsden 2005, Physica D 212 (from memory)"
    time_units: ClassVar[str] = "day"
    state_units: ClassVar[str] = "m"
    step: ClassVar[float] = 1.0 / 24.0
    published: ClassVar[tuple[PublishedValue, ...]] = (
        PublishedValue("sum_of_exponents", 0.0, 1e-12, "flow of a streamfunction (closed form)"),
    )

    @property
    def count(self) -> int:
        """Number of floats K."""
        return int(self.rows) * int(self.columns)

    @property
    def variables(self) -> tuple[str, ...]:
        """Names such as x_0_3 and y_1_2, with row and column of the release point."""
        places = [(j, i) for j in range(int(self.rows)) for i in range(int(self.columns))]
        return tuple(f"{axis}_{j}_{i}" for axis in "xy" for j, i in places)

    def _release(self) -> tuple[Array, Array]:
        """Return distances east (columns,) and north (rows,) of the release points, in metres."""
        rows, columns = int(self.rows), int(self.columns)
        east = 2.0 * self.height * (np.arange(columns) + 0.5) / columns
        return east, self.height * (np.arange(rows) + 0.5) / rows

    def default_state(self) -> Array:
        """Return all floats at their release points."""
        x, y = np.meshgrid(*self._release())
        return np.concatenate([x.ravel(), y.ravel()])

    def streamfunction(self, x: npt.ArrayLike, y: npt.ArrayLike, time: Time = 0.0) -> Array:
        """Return psi in m2 s-1 at ``x``, ``y`` (m) and ``time`` (days); 0 on all walls."""
        east, north = self._unit(x), self._unit(y)
        stretched, _, _ = self._stretch(east, time)
        scale = self.speed * self.height / np.pi
        return np.asarray(scale * np.sin(np.pi * stretched) * np.sin(np.pi * north))

    def velocity(self, x: npt.ArrayLike, y: npt.ArrayLike, time: Time = 0.0) -> tuple[Array, Array]:
        """Return the velocity east and north, in m s-1, at ``x``, ``y`` (m) and ``time`` (days)."""
        east, north = self._unit(x), np.pi * self._unit(y)
        stretched, slope, _ = self._stretch(east, time)
        u = -self.speed * np.sin(np.pi * stretched) * np.cos(north)
        v = self.speed * np.cos(np.pi * stretched) * np.sin(north) * slope
        return np.asarray(u), np.asarray(v)

    def tendency(self, state: npt.ArrayLike, time: Time = 0.0) -> Array:
        """Return the velocities of the floats (..., N), in m per day."""
        velocity = self.velocity(*self._positions(state), np.asarray(time)[..., None])
        return SECONDS_PER_DAY * np.concatenate(velocity, axis=-1)

    def tangent(self, state: npt.ArrayLike, displacement: npt.ArrayLike, time: Time = 0.0) -> Array:
        """Return the linearised tendency (..., N) of ``displacement`` about ``state``."""
        u_x, u_y, v_x, v_y = self._gradient(state, time)
        dx, dy = self._positions(displacement)
        return np.concatenate([u_x * dx + u_y * dy, v_x * dx + v_y * dy], axis=-1)

    def jacobian(self, state: npt.ArrayLike, time: Time = 0.0) -> Array:
        """Return the derivatives of the tendency, (..., N, N), per day."""
        parts = self._gradient(state, time)
        here = np.arange(self.count)
        matrix = np.zeros((*parts[0].shape[:-1], self.size, self.size))
        for number, part in enumerate(parts):
            row, column = divmod(number, 2)
            matrix[..., row * self.count + here, column * self.count + here] = part
        return matrix

    def norms(self) -> dict[str, Norm]:
        """Return the norms: root of the sum of squares, and root mean square over the floats."""
        mean = np.full(self.size, 1.0 / np.sqrt(self.count))
        return {
            **super().norms(),
            "area-weighted": scaled(
                "area-weighted", self.state_units, "root mean square displacement of a float", mean
            ),
        }

    def covariance(self, length: float) -> Array:
        """Return the covariance (N, N) of displacements that near floats have in common.

        Floats released a distance r apart have the correlation exp(-r^2 / (2 L^2)), with L
        ``length`` in metres; displacements east and north are independent.
        """
        metres = require_positive(length, "length")
        places = np.stack(self._positions(self.default_state()), axis=-1)
        distance = np.linalg.norm(places[:, None] - places, axis=-1)
        return np.asarray(np.kron(np.eye(2), gaussian_correlation(distance, metres)))

    def coordinates(self) -> dict[str, tuple[str, Array, dict[str, str]]]:
        """Return latitude and longitude of the release points, on the plane that touches there."""
        east, north = self._release()
        parallel = EARTH_RADIUS * np.cos(np.radians(self.latitude))
        latitude = self.latitude + np.degrees(north / EARTH_RADIUS)
        longitude = self.longitude + np.degrees(east / parallel)
        return {
            LATITUDE: (LATITUDE, latitude, COORDINATE_ATTRIBUTES[LATITUDE]),
            LONGITUDE: (LONGITUDE, longitude, COORDINATE_ATTRIBUTES[LONGITUDE]),
        }

    def fields_of(self, states: npt.ArrayLike) -> tuple[Field, ...]:
        """Return ``x_position`` and ``y_position`` (m) on the grid of release points."""
        towards = {"x_position": "east", "y_position": "north"}
        grid = (int(self.rows), int(self.columns))
        return tuple(
            Field(
                name,
                (LATITUDE, LONGITUDE),
                values.reshape(*values.shape[:-1], *grid),
                {
                    "units": self.state_units,
                    "long_name": f"distance {way} of the basin's south-western corner",
                },
            )
            for (name, way), values in zip(towards.items(), self._positions(states), strict=True)
        )

    def carried_over(self, states: npt.ArrayLike, other: System) -> Array:
        """Return the same places in another flow; the basin and the release points must agree."""
        if isinstance(other, GyreFloats) and other.height != self.height:
            raise ArgumentError(
                "other",
                expected=f"a basin of the same height, {self.height:g} m",
                found=f"{other.height:g} m",
                remedy="floats keep their place only in the same basin: set its height",
            )
        return super().carried_over(states, other)

    def _positions(self, state: npt.ArrayLike) -> tuple[Array, Array]:
        array = np.asarray(state, dtype=float)
        return array[..., : self.count], array[..., self.count :]

    def _unit(self, distance: npt.ArrayLike) -> Array:
        return np.asarray(distance, dtype=float) / self.height

    def _stretch(self, east: Array, time: Time) -> tuple[Array, Array, Array]:
        """Return f, df/dx and d2f/dx2 at ``east`` (units of H) and ``time`` (days)."""
        e = self.swing * np.sin(2.0 * np.pi * np.asarray(time) / self.period)
        return e * east**2 + (1.0 - 2.0 * e) * east, 2.0 * e * (east - 1.0) + 1.0, 2.0 * e

    def _gradient(self, state: npt.ArrayLike, time: Time) -> tuple[Array, Array, Array, Array]:
        """Return du/dx, du/dy, dv/dx, dv/dy (..., K), per day."""
        x, y = self._positions(state)
        stretched, slope, bend = self._stretch(self._unit(x), np.asarray(time)[..., None])
        sine, cosine = np.sin(np.pi * stretched), np.cos(np.pi * stretched)
        sine_y, cosine_y = np.sin(np.pi * self._unit(y)), np.cos(np.pi * self._unit(y))
        rate = SECONDS_PER_DAY * self.speed / self.height
        along = np.pi * rate * cosine * cosine_y * slope
        across = rate * sine_y * (cosine * bend - np.pi * sine * slope**2)
        return -along, np.pi * rate * sine * sine_y, across, along
