"""Random displacements that know nothing of the dynamics: white, and correlated in space."""

from __future__ import annotations

import functools
from dataclasses import dataclass
from typing import ClassVar

import numpy as np
import numpy.typing as npt

from ensemble_horizon.errors import ArgumentError
from ensemble_horizon.toys.dynamics import System
from ensemble_horizon.toys.norms import Array
from ensemble_horizon.toys.perturbations.method import Perturbation, Start, require_option


@dataclass(frozen=True, kw_only=True, eq=False)
class Gaussian(Perturbation):
    """Independent Gaussian displacements, no direction preferred in the chosen norm.

    With the norm |d| = |L d|, the displacement is L^-1 z with z standard normal; for norms that
    weigh all variables alike this is z itself but for its length. ``scale`` then multiplies it
    variable by variable, and the direction is no longer uniform.

    Parameters
    ----------
    scale : array (N,), optional
        Relative size of the displacement by variable, 1 if left out.
    """

    scale: npt.ArrayLike | None = None

    name: ClassVar[str] = "gaussian"
    title: ClassVar[str] = "Gaussian noise without a preferred direction"
    source: ClassVar[str] = "definition"
    nested: ClassVar[bool] = True

    def displacements(self, start: Start, members: int, random: np.random.Generator) -> Array:
        """Return scale * L^-1 z (members, N)."""
        white = random.standard_normal((members, start.system.size))
        return start.measure.restore(white) * require_scale(self.scale, start.system.size)


@dataclass(frozen=True, kw_only=True, eq=False)
class Correlated(Perturbation):
    """Gaussian random fields whose correlation at the distance r is exp(-r^2 / (2 L^2)).

    The fields follow ``system.covariance(L)`` before they are brought to the amplitude.

    Parameters
    ----------
    length : float
        L, in the units in which the system measures distance (its ``covariance`` says which).
    scale : array (N,), optional
        Relative size of the displacement by variable, 1 if left out.
    """

    length: float | None = None
    scale: npt.ArrayLike | None = None

    name: ClassVar[str] = "correlated"
    title: ClassVar[str] = "Gaussian random fields of a given length scale"
    source: ClassVar[str] = "definition"
    nested: ClassVar[bool] = True

    def displacements(self, start: Start, members: int, random: np.random.Generator) -> Array:
        """Return scale * C^(1/2) z (members, N), C being the covariance."""
        size = start.system.size
        length = require_option(self.length, "length", "the length scale of the fields")
        root = _covariance_root(start.system, length)
        white = random.standard_normal((members, size))
        # Member by member, so that the order of summation does not depend on how many there are.
        fields = np.stack([root @ one for one in white])
        return fields * require_scale(self.scale, size)


@functools.lru_cache(maxsize=4)
def _covariance_root(system: System, length: float) -> Array:
    """Return the symmetric root of the covariance, which costs more than many fields drawn by it.

    It is the only root that does not depend on the signs of eigenvectors.
    """
    power, modes = np.linalg.eigh(system.covariance(length))
    return np.asarray((modes * np.sqrt(np.maximum(power, 0.0))) @ modes.T)


def require_scale(scale: npt.ArrayLike | None, size: int) -> Array:
    """Return ``scale`` (size,), ones if left out, if it is of use as relative sizes."""
    if scale is None:
        return np.ones(size)
    array = np.asarray(scale, dtype=float)
    usable = array.shape == (size,) and np.all(np.isfinite(array)) and np.all(array >= 0)
    if not usable or not np.any(array > 0):
        raise ArgumentError(
            "scale",
            expected=f"{size} numbers of at least zero, not all of them zero",
            found=f"{np.min(array):g} among them"
            if array.shape == (size,) and np.any(array < 0)
            else f"shape {array.shape}",
            remedy="give one relative size per variable of the system",
        )
    return array
