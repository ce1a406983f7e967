"""Advection round a ring of sites, and the place of the ring on the globe."""

from __future__ import annotations

import numpy as np

from ensemble_horizon.toys.norms import Array
from ensemble_horizon.vocabulary import CELL, COORDINATE_ATTRIBUTES, LATITUDE, LONGITUDE

RING_LATITUDE = 45.0


def advection(carried: Array, carrier: Array, direction: int = 1) -> Array:
    """Return (a_(k+s) - a_(k-2s)) b_(k-s) for a ``carried`` and b ``carrier``, both (..., sites).

    Parameters
    ----------
    direction : int
        s, 1 or -1: the way round the ring.

    Examples
    --------
    >>> ring = np.arange(6.0)
    >>> advection(ring, ring).tolist()
    [-15.0, -0.0, 3.0, 6.0, 9.0, -12.0]
    """
    a, b = carried, carrier
    if a.shape != b.shape:
        a, b = np.broadcast_arrays(a, b)
    a, b = np.ascontiguousarray(a), np.ascontiguousarray(b)
    out = np.empty_like(a)
    # The whole ensemble is shifted as one row, which is several times faster than row by row;
    # the sites whose neighbours lie across the ring's seam are put right afterwards.
    p, q, inner = a.reshape(-1), b.reshape(-1), out.reshape(-1)
    if direction > 0:
        np.subtract(p[3:], p[:-3], out=inner[2:-1])
        inner[2:-1] *= q[1:-2]
        seam = (0, 1, -1)
    else:
        np.subtract(p[:-3], p[3:], out=inner[1:-2])
        inner[1:-2] *= q[2:-1]
        seam = (-1, -2, 0)
    for k in seam:
        slope = a[..., k + direction] - a[..., k - 2 * direction]
        out[..., k] = slope * b[..., k - direction]
    return out


def advection_tangent(around: Array, moved: Array, direction: int = 1) -> Array:
    """Return the derivative of ``advection(x, x)`` at ``around``, applied to ``moved``."""
    change = advection(around, moved, direction)
    change += advection(moved, around, direction)
    return change


def advection_jacobian(around: Array, direction: int = 1) -> Array:
    """Return the derivative of ``advection(x, x)``, (..., sites, sites), at (..., sites)."""
    here = np.arange(around.shape[-1])
    ahead, behind, two_behind = (np.roll(here, -direction * shift) for shift in (1, -1, -2))
    matrix = np.zeros((*around.shape, here.size))
    matrix[..., here, ahead] = around[..., behind]
    matrix[..., here, two_behind] = -around[..., behind]
    matrix[..., here, behind] = around[..., ahead] - around[..., two_behind]
    return matrix


def ring_coordinates(sites: int) -> dict[str, tuple[str, Array, dict[str, str]]]:
    """Return latitude and longitude of ``sites`` evenly round the circle of 45 degrees north."""
    longitude = 360.0 * np.arange(sites) / sites
    return {
        LATITUDE: (CELL, np.full(sites, RING_LATITUDE), COORDINATE_ATTRIBUTES[LATITUDE]),
        LONGITUDE: (CELL, longitude, COORDINATE_ATTRIBUTES[LONGITUDE]),
    }
