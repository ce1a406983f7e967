"""Norms in which the size of a displacement is stated."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

Array = npt.NDArray[np.float64]
Map = Callable[[Array], Array]


@dataclass(frozen=True)
class Norm:
    """A norm |d| = |L d| in the Euclidean sense, with L linear and invertible.

    Parameters
    ----------
    name, units, meaning : str
    flatten : callable
        L: displacements (..., N) to coordinates (..., N) whose Euclidean length is the norm.
    restore : callable
        Its inverse.

    Examples
    --------
    >>> norm = scaled("area-weighted", "m", "root mean square over four points", np.full(4, 0.5))
    >>> float(norm.length(np.full(4, 3.0)))
    3.0
    """

    name: str
    units: str
    meaning: str
    flatten: Map
    restore: Map

    def length(self, displacement: npt.ArrayLike) -> Array:
        """Return the norm (...) of displacements (..., N)."""
        return np.asarray(np.linalg.norm(self.flatten(np.asarray(displacement, float)), axis=-1))


def scaled(name: str, units: str, meaning: str, factor: Array) -> Norm:
    """Return the norm sqrt(sum (factor_i d_i)^2), with ``factor`` (N,) above zero."""
    return Norm(name, units, meaning, lambda d: d * factor, lambda d: d / factor)
