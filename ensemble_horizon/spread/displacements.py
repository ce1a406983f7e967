"""Positions of members as displacements about their mean position: numpy kernels, no labels.

On the sphere the displacement is that of the azimuthal equidistant map about the mean position
(Snyder 1987, Map Projections, a Working Manual, USGS Professional Paper 1395, from memory), so its
length is the great-circle distance; the mean position is the mean of the unit vectors, brought back
to the sphere (Mardia and Jupp 2000, Directional Statistics, from memory). Date line and poles are
places like any other.
"""

from __future__ import annotations

import numpy as np

SPHERE, PLANE = "sphere", "plane"
EARTH_RADIUS_M = 6_371_000.0  # mean radius, rounded (common practice)

# Points handled at once: a dozen arrays of members x slab x 8 bytes should stay in a core's cache.
_SLAB = 1024
# A mean of unit vectors shorter than this points nowhere: single precision makes 1e-7 of nothing.
_LEAST_RESULTANT = 1e-6
# Radians: members at one and the same place come out as far apart as rounding puts them, which a
# fit of the logarithm would take for a spread.
_ROUNDING = 1e-14
# Degrees east beyond ten turns of the globe are no longitude but a fill value nobody declared.
_TURNS = 3600.0


def displacements(
    first: np.ndarray, second: np.ndarray, geometry: str
) -> tuple[np.ndarray, np.ndarray]:
    """Displacements of the members from their mean position, east and north (or along x and y).

    Parameters
    ----------
    first, second : (M, P) floats
        Latitude and longitude in degrees on the ``"sphere"``, x and y in one unit on the
        ``"plane"``; a position is missing where either is.
    geometry : ``SPHERE`` or ``PLANE``

    Returns
    -------
    east, north : (M, P) in metres on the sphere, in the unit of the input on the plane
        In the precision of the input, worked out in double. NaN where a position is missing or
        lies off the sphere (beyond 90 degrees), and at points whose mean position is not defined
        because the members lie all around the globe.

    Examples
    --------
    >>> latitude, longitude = np.array([[0.0], [0.0]]), np.array([[179.5], [-179.5]])
    >>> east, north = displacements(latitude, longitude, SPHERE)
    >>> (east.ravel() / 1000).round(1).tolist()  # half a degree of the equator
    [-55.6, 55.6]
    """
    kind = np.result_type(first, second, np.float32)
    east, north = np.empty(first.shape, dtype=kind), np.empty(first.shape, dtype=kind)
    kernel = _on_sphere if geometry == SPHERE else _on_plane
    for begin in range(0, first.shape[1], _SLAB):
        piece = slice(begin, begin + _SLAB)
        pair = first[:, piece].astype(float), second[:, piece].astype(float)
        east[:, piece], north[:, piece] = kernel(*pair)
    return east, north


def whole_positions(first: np.ndarray, second: np.ndarray, geometry: str) -> np.ndarray:
    """The first coordinate, NaN where either is missing or the second is no longitude.

    What this leaves is held against the plausible range, which knows the latitudes.
    """
    whole = np.isfinite(first) & np.isfinite(second)
    if geometry == SPHERE:
        with np.errstate(invalid="ignore"):
            whole &= np.abs(second) <= _TURNS
    return first if whole.all() else np.where(whole, first, np.nan)


def _on_sphere(latitude: np.ndarray, longitude: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    with np.errstate(invalid="ignore"):
        known = (np.abs(latitude) <= 90) & (np.abs(longitude) <= _TURNS)
    whole = known.all()
    phi = np.radians(latitude if whole else np.where(known, latitude, 0.0))
    turn = np.radians(longitude if whole else np.where(known, longitude, 0.0))
    shrunk = np.cos(phi)
    unit = [shrunk * np.cos(turn), shrunk * np.sin(turn), np.sin(phi)]
    x, y, z = unit if whole else (np.where(known, part, 0.0) for part in unit)
    count = np.maximum(known.sum(axis=0), 1)
    mean_x, mean_y, mean_z = (part.sum(axis=0) / count for part in (x, y, z))
    flat = np.hypot(mean_x, mean_y)
    length = np.hypot(flat, mean_z)
    # Where the mean lies: cosine and sine of its longitude and of its latitude.
    around, middle = np.arctan2(mean_y, mean_x), np.arctan2(mean_z, flat)
    (cos_around, sin_around), (cos_middle, sin_middle) = (
        (np.cos(part), np.sin(part)) for part in (around, middle)
    )
    outward = cos_around * x + sin_around * y
    eastward = cos_around * y - sin_around * x
    northward = cos_middle * z - sin_middle * outward
    sine = np.sqrt(eastward**2 + northward**2)
    angle = np.arctan2(sine, cos_middle * outward + sin_middle * z)
    angle[angle < _ROUNDING] = 0.0
    through = (sine == 0) & (angle > 0)
    northward[through] = sine[through] = 1.0  # straight through the globe every way is the same
    sine[sine == 0] = 1.0
    scale = EARTH_RADIUS_M * angle / sine
    known &= length > _LEAST_RESULTANT
    if not known.all():
        scale[~known] = np.nan
    return scale * eastward, scale * northward


def _on_plane(x: np.ndarray, y: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    known = np.isfinite(x) & np.isfinite(y)
    count = np.maximum(known.sum(axis=0), 1)
    # Moved to the first member there is, a small cloud far from the origin keeps its digits.
    rows = np.argmax(known, axis=0)[np.newaxis]
    found = []
    for part in (x, y):
        moved = np.where(known, part, np.nan) - np.take_along_axis(part, rows, axis=0)
        found.append(moved - np.where(known, moved, 0.0).sum(axis=0) / count)
    return found[0], found[1]
