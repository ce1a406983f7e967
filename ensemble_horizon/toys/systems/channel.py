"""The two-layer quasi-geostrophic channel on a beta plane, spectral, forced by a baroclinic jet.

    q1 = lap psi1 - F (psi1 - psi2),  q2 = lap psi2 + F (psi1 - psi2),  F = 1 / (2 Rd^2)
    dq1/dt = -J(psi1, q1) - beta d(psi1)/dx + F r (psi1 - psi2 - psi_eq)              - D q1
    dq2/dt = -J(psi2, q2) - beta d(psi2)/dx - F r (psi1 - psi2 - psi_eq) - d lap psi2 - D q2

Layer 1 lies on layer 2, both equally deep; r relaxes the shear to an equilibrium jet, d is the
Ekman drag of the lower layer, D a hyperdiffusion. Sources: Phillips 1954, Tellus 6; Charney and
Straus 1980, J. Atmos. Sci. 37. The six-mode form has 12 variables.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property
from typing import ClassVar

import numpy as np
import numpy.typing as npt

from ensemble_horizon.checks import require_positive
from ensemble_horizon.errors import ArgumentError
from ensemble_horizon.toys.dynamics import Field, System, Time, parameter, require_states
from ensemble_horizon.toys.norms import Array, Norm, scaled
from ensemble_horizon.toys.systems.channel_basis import ChannelBasis, Gradient, Points
from ensemble_horizon.vocabulary import COORDINATE_ATTRIBUTES, LATITUDE, LONGITUDE

EARTH_RADIUS = 6.371e6
EARTH_ROTATION = 7.292e-5
SECONDS_PER_DAY = 86400.0
LAYERS = ("upper", "lower")


@dataclass(frozen=True)
class TwoLayerChannel(System):
    """Two-layer quasi-geostrophic channel; states hold streamfunction coefficients in m2 s-1.

    A state (..., N) is the upper layer's coefficients followed by the lower layer's, each in the
    order of `ChannelBasis`, N = 2 P (1 + 2 M). Time is in days. With ``relaxation_rate``,
    ``drag_rate`` and ``diffusion_rate`` at zero, `energy` and `potential_enstrophy` are constant.

    Examples
    --------
    >>> channel = TwoLayerChannel()
    >>> channel.size
    12
    >>> TwoLayerChannel(zonal_waves=10, meridional_modes=10).size
    420
    """

    zonal_waves: int = parameter(1, "1", "zonal wavenumbers kept, M", minimum=1, whole=True)
    meridional_modes: int = parameter(2, "1", "meridional modes kept, P", minimum=1, whole=True)
    length: float = parameter(4.5e6, "m", "length of the channel", above=0.0)
    width: float = parameter(5.0e6, "m", "width of the channel", above=0.0)
    latitude: float = parameter(43.125, "degrees_north", "latitude of the middle", above=0.0)
    deformation_radius: float = parameter(6.0e5, "m", "internal Rossby radius Rd", above=0.0)
    shear: float = parameter(30.0, "m s-1", "peak of the equilibrium jet's shear")
    jet_width: float = parameter(1.2e6, "m", "half width of the equilibrium jet", above=0.0)
    relaxation_rate: float = parameter(0.05, "day-1", "relaxation r to the jet", minimum=0.0)
    drag_rate: float = parameter(0.2, "day-1", "Ekman drag d of the lower layer", minimum=0.0)
    diffusion_rate: float = parameter(
        2.0, "day-1", "hyperdiffusion D at the shortest scale kept", minimum=0.0
    )
    diffusion_order: int = parameter(
        4, "1", "power of the Laplacian in the hyperdiffusion", minimum=1, whole=True
    )

    name: ClassVar[str] = "two-layer-channel"
    title: ClassVar[str] = "Two-layer quasi-geostrophic channel with a baroclinic jet"
    source: ClassVar[str] = "Phillips 1954, Tellus 6; Charney and Straus 1980, J. Atmos. Sci. 37"
    time_units: ClassVar[str] = "day"
    state_units: ClassVar[str] = "m2 s-1"
    step: ClassVar[float] = 1.0 / 24.0
    spin_up: ClassVar[float] = 120.0

    @cached_property
    def basis(self) -> ChannelBasis:
        """The functions that the coefficients belong to."""
        return ChannelBasis(
            int(self.zonal_waves), int(self.meridional_modes), self.length, self.width
        )

    @property
    def variables(self) -> tuple[str, ...]:
        """Names such as upper_zonal_1, lower_sine_1_2."""
        return tuple(f"{layer}_{name}" for layer in LAYERS for name in self.basis.names)

    @property
    def size(self) -> int:
        """Number of variables N."""
        return 2 * self.basis.count

    @property
    def coriolis(self) -> float:
        """Coriolis parameter f at the middle latitude, s-1."""
        return float(2 * EARTH_ROTATION * np.sin(np.radians(self.latitude)))

    @property
    def beta(self) -> float:
        """Northward gradient of the Coriolis parameter, m-1 s-1."""
        return float(2 * EARTH_ROTATION * np.cos(np.radians(self.latitude)) / EARTH_RADIUS)

    @property
    def coupling(self) -> float:
        """F = 1 / (2 Rd^2), m-2."""
        return 0.5 / self.deformation_radius**2

    @cached_property
    def _square(self) -> Array:
        k, l = self.basis.wavenumbers()  # noqa: E741
        return np.asarray(k**2 + l**2)

    @cached_property
    def _damping(self) -> Array:
        """Hyperdiffusion rate (n,), s-1."""
        relative = (self._square / self._square.max()) ** int(self.diffusion_order)
        return np.asarray(self.diffusion_rate / SECONDS_PER_DAY * relative)

    @cached_property
    def _quadrature(self) -> tuple[Points, Array]:
        return self.basis.quadrature()

    @cached_property
    def equilibrium(self) -> Array:
        """Coefficients (n,) of psi_eq, whose flow is shear * sech^2((y - width/2) / jet_width)."""
        modes = int(self.meridional_modes)
        node, weight = np.polynomial.legendre.leggauss(200 + 4 * modes)
        y = 0.5 * self.width * (node + 1.0)
        flow = self.shear / np.cosh((y - 0.5 * self.width) / self.jet_width) ** 2
        l = np.pi * np.arange(1, modes + 1)[:, None] / self.width  # noqa: E741
        coefficients = np.zeros(self.basis.count)
        coefficients[:modes] = np.sqrt(2.0) * (np.sin(l * y) @ (0.5 * weight * flow)) / l[:, 0]
        return coefficients

    def default_state(self) -> Array:
        """Return the equilibrium jet in the upper layer with weak, always equal, waves on it."""
        state = np.zeros((2, self.basis.count))
        state[0] = self.equilibrium
        modes = int(self.meridional_modes)
        rng = np.random.default_rng(1954)
        waves = rng.standard_normal((2, self.basis.count - modes)) / self._square[modes:]
        state[:, modes:] += 2.0 * waves * np.sqrt(self._square.min())
        return state.ravel()

    def vorticity(self, state: npt.ArrayLike) -> Array:
        """Return potential vorticity coefficients (..., 2, n), s-1, without the part beta y."""
        psi = self._split(state)
        stretching = self.coupling * (psi[..., 0, :] - psi[..., 1, :])
        q = -self._square * psi
        q[..., 0, :] -= stretching
        q[..., 1, :] += stretching
        return np.asarray(q)

    def norms(self) -> dict[str, Norm]:
        """Return the norms: area-weighted over both layers, and total energy, as a wind speed.

        The total-energy norm is sqrt(2 E), so that a displacement without shear between the layers
        has its root-mean-square wind as its norm.
        """
        vertical = np.stack([self._square, self._square + 2 * self.coupling])
        weight = np.sqrt(0.5 * vertical)

        def flatten(displacement: Array) -> Array:
            return (_vertical_modes(self._split(displacement)) * weight).reshape(displacement.shape)

        def restore(modes: Array) -> Array:
            return _vertical_modes(self._split(modes) / weight).reshape(modes.shape)

        mean = np.full(self.size, np.sqrt(0.5))
        return {
            **super().norms(),
            "area-weighted": scaled(
                "area-weighted", self.state_units, "root mean square over area and layers", mean
            ),
            "total-energy": Norm(
                "total-energy", "m s-1", "root of twice the energy per mass", flatten, restore
            ),
        }

    def covariance(self, length: float) -> Array:
        """Return the covariance (N, N) of fields of streamfunction with the length scale in metres.

        Coefficients of wavenumbers (k, l) have the variance exp(-(k^2 + l^2) L^2 / 2), which makes
        the correlation exp(-r^2 / (2 L^2)) away from the walls if the truncation resolves L.
        The layers are independent.
        """
        metres = require_positive(length, "length")
        return np.diag(np.tile(np.exp(-0.5 * self._square * metres**2), 2))

    def energy(self, state: npt.ArrayLike) -> Array:
        """Return total energy per unit mass (...), m2 s-2.

        Kinetic |grad psi|^2 / 2 averaged over area and layers, plus F (psi1 - psi2)^2 / 4.
        """
        return np.asarray(-0.25 * np.sum(self._split(state) * self.vorticity(state), axis=(-2, -1)))

    def potential_enstrophy(self, state: npt.ArrayLike) -> Array:
        """Return q^2 / 2 averaged over area and layers (...), s-2."""
        return np.asarray(0.25 * np.sum(self.vorticity(state) ** 2, axis=(-2, -1)))

    def tendency(self, state: npt.ArrayLike, time: Time = 0.0) -> Array:
        """Return the change of the coefficients, (..., N), m2 s-1 per day."""
        psi, q = self._split(state), self.vorticity(state)
        points, weights = self._quadrature
        flow, tracer = self.basis.gradient(psi, points), self.basis.gradient(q, points)
        advection = self.basis.project(_determinant(flow, tracer), points, weights)
        return self._streamfunction(self._linear(psi, q, self.equilibrium) - advection)

    def tangent(self, state: npt.ArrayLike, displacement: npt.ArrayLike, time: Time = 0.0) -> Array:
        """Return the exact linearised tendency (..., N) of ``displacement`` about ``state``."""
        around, moved = np.asarray(state, dtype=float), np.asarray(displacement, dtype=float)
        # Grids carry the ensemble's axes in the middle, so both need the same number of them.
        axes = max(around.ndim, moved.ndim)
        around = around.reshape((1,) * (axes - around.ndim) + around.shape)
        moved = moved.reshape((1,) * (axes - moved.ndim) + moved.shape)
        psi, q = self._split(around), self.vorticity(around)
        psi_d, q_d = self._split(moved), self.vorticity(moved)
        points, weights = self._quadrature
        gradient = self.basis.gradient
        turning = _determinant(gradient(psi, points), gradient(q_d, points))
        turning = turning + _determinant(gradient(psi_d, points), gradient(q, points))
        advection = self.basis.project(turning, points, weights)
        return self._streamfunction(self._linear(psi_d, q_d, 0.0) - advection)

    def jacobian(self, state: npt.ArrayLike, time: Time = 0.0) -> Array:
        """Return the derivatives of the tendency, (..., N, N), per day."""
        states = np.asarray(state, dtype=float)
        columns = self.tangent(states[..., None, :], np.eye(self.size))
        return np.asarray(np.swapaxes(columns, -1, -2))

    def evaluate(
        self, states: npt.ArrayLike, latitude: npt.ArrayLike, longitude: npt.ArrayLike
    ) -> dict[str, Array]:
        """Return streamfunction and geostrophic wind of both layers on a latitude-longitude grid.

        Parameters
        ----------
        states : array (..., N)
        latitude : array (J,)
            Degrees north; the channel's middle lies at the parameter ``latitude``.
        longitude : array (I,)
            Degrees east of the channel's origin; the channel is periodic along it.

        Returns
        -------
        dict of array (..., J, I)
            ``streamfunction_upper`` in m2 s-1, ``eastward_wind_upper`` and
            ``northward_wind_upper`` in m s-1, and the same for ``lower``.
        """
        north = np.radians(np.asarray(latitude, dtype=float) - self.latitude) * EARTH_RADIUS
        parallel = EARTH_RADIUS * np.cos(np.radians(self.latitude))
        east = np.radians(np.asarray(longitude, dtype=float)) * parallel
        points = self.basis.points(east, 0.5 * self.width + north)
        psi = self._split(states)
        slope = self.basis.gradient(psi, points)
        values = {
            "streamfunction": self.basis.values(psi, points),
            "eastward_wind": -slope.y,
            "northward_wind": slope.x,
        }
        return {
            f"{name}_{layer}": np.moveaxis(array[..., index, :], 0, -1)
            for index, layer in enumerate(LAYERS)
            for name, array in values.items()
        }

    def coordinates(self) -> dict[str, tuple[str, Array, dict[str, str]]]:
        """Return latitudes and longitudes of a grid that resolves the truncation."""
        rows, columns = 2 * int(self.meridional_modes) + 1, 4 * int(self.zonal_waves)
        y = self.width * (np.arange(1, rows + 1) / (rows + 1) - 0.5)
        parallel = EARTH_RADIUS * np.cos(np.radians(self.latitude))
        x = self.length * np.arange(columns) / columns
        return {
            LATITUDE: (
                LATITUDE,
                self.latitude + np.degrees(y / EARTH_RADIUS),
                COORDINATE_ATTRIBUTES[LATITUDE],
            ),
            LONGITUDE: (LONGITUDE, np.degrees(x / parallel), COORDINATE_ATTRIBUTES[LONGITUDE]),
        }

    def fields_of(self, states: npt.ArrayLike) -> tuple[Field, ...]:
        """Return streamfunction and wind of both layers on the grid of `coordinates`."""
        grid = self.coordinates()
        found = self.evaluate(states, grid[LATITUDE][1], grid[LONGITUDE][1])
        return tuple(
            Field(name, (LATITUDE, LONGITUDE), values, _attributes(name))
            for name, values in found.items()
        )

    def carried_over(self, states: npt.ArrayLike, other: System) -> Array:
        """Return ``states`` at the truncation of ``other``, a channel of the same size in metres.

        Coefficients that only one of the two truncations keeps are cut off or zero.
        """
        array = require_states(self, states, "states")
        if not isinstance(other, TwoLayerChannel):
            return super().carried_over(array, other)
        if (other.length, other.width) != (self.length, self.width):
            raise ArgumentError(
                "other",
                expected=f"a channel {self.length:g} m long and {self.width:g} m wide",
                found=f"one {other.length:g} m long and {other.width:g} m wide",
                remedy="take the same length and width: other waves fit into another channel",
            )
        layers = self.basis.carried_over(self._split(array), other.basis)
        return layers.reshape(*layers.shape[:-2], other.size)

    def _split(self, state: npt.ArrayLike) -> Array:
        array = np.asarray(state, dtype=float)
        return array.reshape(*array.shape[:-1], 2, self.basis.count)

    def _linear(self, psi: Array, q: Array, target: Array | float) -> Array:
        """Return beta term, relaxation to ``target``, drag and diffusion: dq/dt (..., 2, n)."""
        change = -self.beta * self.basis.slope_along(psi) - self._damping * q
        warmth = psi[..., 0, :] - psi[..., 1, :] - target
        heating = self.coupling * self.relaxation_rate / SECONDS_PER_DAY * warmth
        change[..., 0, :] += heating
        change[..., 1, :] -= heating
        change[..., 1, :] += self.drag_rate / SECONDS_PER_DAY * self._square * psi[..., 1, :]
        return np.asarray(change)

    def _streamfunction(self, q: Array) -> Array:
        """Return psi (..., N) per day from potential vorticity (..., 2, n) per second."""
        mean = -(q[..., 0, :] + q[..., 1, :]) / self._square
        shear = -(q[..., 0, :] - q[..., 1, :]) / (self._square + 2 * self.coupling)
        psi = 0.5 * SECONDS_PER_DAY * np.stack([mean + shear, mean - shear], axis=-2)
        return psi.reshape(*psi.shape[:-2], -1)


def _vertical_modes(layers: Array) -> Array:
    """Return barotropic and baroclinic part of two layers (..., 2, n), or the layers of those."""
    upper, lower = layers[..., 0, :], layers[..., 1, :]
    return np.asarray(np.sqrt(0.5) * np.stack([upper + lower, upper - lower], axis=-2))


def _determinant(flow: Gradient, tracer: Gradient) -> Array:
    """Return J(psi, q) = dpsi/dx dq/dy - dpsi/dy dq/dx."""
    return np.asarray(flow.x * tracer.y - flow.y * tracer.x)


def _attributes(name: str) -> dict[str, str]:
    quantity, layer = name.rsplit("_", 1)
    if quantity == "streamfunction":
        return {"units": "m2 s-1", "long_name": f"geostrophic streamfunction, {layer} layer"}
    return {
        "units": "m s-1",
        "standard_name": quantity,
        "long_name": f"{quantity.replace('_', ' ')}, {layer} layer",
    }
