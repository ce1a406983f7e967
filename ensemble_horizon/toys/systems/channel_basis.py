"""Sines, cosines and quadrature of the channel: between coefficients and points.

Basis functions (Charney and Straus 1980, J. Atmos. Sci. 37), each with mean square 1 over the
channel 0 <= x < length, 0 <= y <= width, with k = 2 pi m / length and l = pi p / width:

    zonal   sqrt(2) cos(l y)           p = 1 .. P      (its flow vanishes at the walls)
    wave    2 cos(k x) sin(l y)        m = 1 .. M
    wave    2 sin(k x) sin(l y)

Coefficients (..., n) with n = P + 2 M P are ordered: zonal p = 1 .. P, then for each m the
cosines p = 1 .. P and the sines p = 1 .. P.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import NamedTuple

import numpy as np

from ensemble_horizon.toys.norms import Array


class Points(NamedTuple):
    """Values of the one-dimensional basis functions on a grid of points, and their slopes.

    ``zonal`` and ``zonal_slope`` (P, J), ``sine`` and ``sine_slope`` (P, J) across the channel;
    ``along`` and ``along_slope`` (I, 2 M + 1) along it, the first column being 1.
    """

    zonal: Array
    zonal_slope: Array
    sine: Array
    sine_slope: Array
    along: Array
    along_slope: Array


class Gradient(NamedTuple):
    """Slopes along (``x``) and across (``y``) the channel on a grid, (I, ..., J)."""

    x: Array
    y: Array


@dataclass(frozen=True)
class ChannelBasis:
    """The basis for ``zonal_waves`` M and ``meridional_modes`` P in a channel in metres."""

    zonal_waves: int
    meridional_modes: int
    length: float
    width: float

    @property
    def count(self) -> int:
        """Number of basis functions, P + 2 M P."""
        return self.meridional_modes * (1 + 2 * self.zonal_waves)

    @property
    def names(self) -> tuple[str, ...]:
        """Short names of the basis functions, such as zonal_1, cosine_1_2, sine_1_2."""
        modes = range(1, self.meridional_modes + 1)
        names = [f"zonal_{p}" for p in modes]
        for m in range(1, self.zonal_waves + 1):
            names += [f"cosine_{m}_{p}" for p in modes]
            names += [f"sine_{m}_{p}" for p in modes]
        return tuple(names)

    def wavenumbers(self) -> tuple[Array, Array]:
        """Return k and l (n,) of the basis functions, in radians per metre."""
        along = np.concatenate([[0], np.repeat(np.arange(1, self.zonal_waves + 1), 2)])
        across = np.arange(1, self.meridional_modes + 1)
        k, l = np.meshgrid(along, across, indexing="ij")  # noqa: E741
        return 2 * np.pi * k.ravel() / self.length, np.pi * l.ravel() / self.width

    def slope_along(self, coefficients: Array) -> Array:
        """Return the coefficients of the derivative along the channel (exact)."""
        k = self.wavenumbers()[0].reshape(-1, self.meridional_modes)
        split = coefficients.reshape(*coefficients.shape[:-1], *k.shape)
        slope = np.zeros_like(split)
        slope[..., 1::2, :] = k[1::2] * split[..., 2::2, :]
        slope[..., 2::2, :] = -k[2::2] * split[..., 1::2, :]
        return slope.reshape(coefficients.shape)

    def carried_over(self, coefficients: Array, other: ChannelBasis) -> Array:
        """Return coefficients (..., n) in the order of ``other``: cut off, or filled with zeros."""
        rows = coefficients.reshape(*coefficients.shape[:-1], -1, self.meridional_modes)
        waves = min(self.zonal_waves, other.zonal_waves)
        shared = (..., slice(1 + 2 * waves), slice(min(rows.shape[-1], other.meridional_modes)))
        carried = np.zeros((*rows.shape[:-2], 1 + 2 * other.zonal_waves, other.meridional_modes))
        carried[shared] = rows[shared]
        return carried.reshape(*carried.shape[:-2], other.count)

    def points(self, x: Array, y: Array) -> Points:
        """Return the basis functions at ``x`` (I,) and ``y`` (J,), metres from the corner."""
        l = np.pi * np.arange(1, self.meridional_modes + 1)[:, None] / self.width  # noqa: E741
        k = 2 * np.pi * np.arange(1, self.zonal_waves + 1) / self.length
        phase = np.outer(x, k)
        along = np.ones((x.size, 2 * self.zonal_waves + 1))
        along[:, 1::2] = 2 * np.cos(phase)
        along[:, 2::2] = 2 * np.sin(phase)
        slope = np.zeros_like(along)
        slope[:, 1::2] = -k * along[:, 2::2]
        slope[:, 2::2] = k * along[:, 1::2]
        return Points(
            zonal=np.sqrt(2.0) * np.cos(l * y),
            zonal_slope=-np.sqrt(2.0) * l * np.sin(l * y),
            sine=np.sin(l * y),
            sine_slope=np.asarray(l * np.cos(l * y)),
            along=along,
            along_slope=slope,
        )

    def quadrature(self) -> tuple[Points, Array]:
        """Return points and weights (J,) that integrate a product of three basis functions.

        Along the channel I > 3 M evenly spaced points are exact. Across it a product of sines and
        cosines on the half wave is no Fourier series of its own, so Gauss-Legendre nodes are
        taken, enough of them that the rest falls below rounding.
        """
        across = int(np.ceil(2.4 * self.meridional_modes)) + 16
        node, weight = np.polynomial.legendre.leggauss(across)
        along = 3 * self.zonal_waves + 1
        x = self.length * np.arange(along) / along
        points = self.points(x, 0.5 * self.width * (node + 1.0))
        return points, 0.5 * weight / along

    def values(self, coefficients: Array, points: Points) -> Array:
        """Return the field (I, ..., J) of coefficients (..., n)."""
        return np.tensordot(
            points.along, self._across(coefficients, points.zonal, points.sine), axes=1
        )

    def gradient(self, coefficients: Array, points: Points) -> Gradient:
        """Return the field's slopes along and across the channel, each (I, ..., J)."""
        level = self._across(coefficients, points.zonal, points.sine)
        steep = self._across(coefficients, points.zonal_slope, points.sine_slope)
        return Gradient(
            np.tensordot(points.along_slope, level, axes=1),
            np.tensordot(points.along, steep, axes=1),
        )

    def project(self, values: Array, points: Points, weights: Array) -> Array:
        """Return the coefficients (..., n) of fields (I, ..., J) given at quadrature points."""
        profile = np.tensordot(points.along.T, values, axes=1)
        joined = np.empty((*profile.shape[:-1], self.meridional_modes))
        joined[:1] = profile[:1] @ (points.zonal * weights).T
        joined[1:] = profile[1:] @ (points.sine * weights).T
        joined = np.moveaxis(joined, 0, -2)
        return joined.reshape(*joined.shape[:-2], -1)

    def _across(self, coefficients: Array, zonal: Array, sine: Array) -> Array:
        """Return the profiles across the channel (2 M + 1, ..., J).

        The axis to be summed next stands first, so that the sum is one large matrix product for
        the whole ensemble rather than a small one per member.
        """
        split = coefficients.reshape(*coefficients.shape[:-1], -1, self.meridional_modes)
        split = np.ascontiguousarray(np.moveaxis(split, -2, 0))
        profile = np.empty((*split.shape[:-1], zonal.shape[-1]))
        modes = split.shape[-1]
        profile[:1] = split[:1] @ zonal
        waves = split[1:].reshape(-1, modes) @ sine
        profile[1:] = waves.reshape(profile[1:].shape)
        return profile
