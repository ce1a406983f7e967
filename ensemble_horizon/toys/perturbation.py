"""Perturbed initial states: a registry of methods, each giving displacements of a given norm."""

from __future__ import annotations

from collections.abc import Callable

import numpy as np
import numpy.typing as npt

from ensemble_horizon.checks import require_choice, require_positive
from ensemble_horizon.errors import ArgumentError
from ensemble_horizon.toys.dynamics import System, require_states
from ensemble_horizon.toys.norms import Array

Directions = Callable[[System, Array, int, np.random.Generator], Array]


def gaussian(system: System, state: Array, members: int, random: np.random.Generator) -> Array:
    """Return independent standard normal displacements (members, N): no direction preferred."""
    return random.standard_normal((members, system.size))


PERTURBATIONS: dict[str, Directions] = {"gaussian": gaussian}


def perturb(
    system: System,
    state: npt.ArrayLike,
    members: int,
    *,
    amplitude: float,
    seed: int,
    norm: str = "euclidean",
    method: str = "gaussian",
    scale: npt.ArrayLike | None = None,
) -> Array:
    """Return ``members`` states (members, N) around ``state`` (N,).

    Every member lies at the distance ``amplitude`` from ``state`` in the chosen norm, exactly.

    Parameters
    ----------
    system : System
    state : array (N,)
        The control.
    members : int
        Number of perturbed states; the control is not one of them.
    amplitude : float
        Length of every displacement, in the units of the norm.
    seed : int
        Seed of the random numbers; the same seed gives the same members.
    norm : str
        A key of ``system.norms()``.
    method : str
        A key of `PERTURBATIONS`.
    scale : array (N,), optional
        Relative size of the displacement by variable, 1 if left out.

    Raises
    ------
    ArgumentError
        If an argument is out of range or the method unknown.

    Examples
    --------
    >>> from ensemble_horizon.toys.systems.lorenz import Lorenz63
    >>> states = perturb(Lorenz63(), [1.0, 2.0, 20.0], 4, amplitude=0.01, seed=7)
    >>> states.shape, np.linalg.norm(states - [1.0, 2.0, 20.0], axis=-1).round(9).tolist()
    ((4, 3), [0.01, 0.01, 0.01, 0.01])
    """
    control = require_states(system, state, "state")
    if control.ndim != 1:
        raise ArgumentError(
            "state",
            expected=f"one state of {system.size} variables",
            found=f"shape {control.shape}",
            remedy="perturb the control of one start at a time",
        )
    if isinstance(members, bool) or not isinstance(members, int | np.integer) or members < 1:
        raise ArgumentError(
            "members",
            expected="a whole number of at least 1",
            found=repr(members),
            remedy="correct the number of members",
        )
    length = require_positive(amplitude, "amplitude", zero=True)
    norms = system.norms()
    measure = norms[require_choice(norm, norms, "norm")]
    directions = PERTURBATIONS[require_choice(method, PERTURBATIONS, "method")]
    displacement = directions(system, control, int(members), np.random.default_rng(seed))
    displacement = displacement * _require_scale(system, scale)
    displacement *= length / measure.length(displacement)[..., None]
    return np.asarray(control + displacement)


def _require_scale(system: System, scale: npt.ArrayLike | None) -> Array:
    if scale is None:
        return np.ones(system.size)
    array = np.asarray(scale, dtype=float)
    usable = array.shape == (system.size,) and np.all(np.isfinite(array)) and np.all(array >= 0)
    if not usable or not np.any(array > 0):
        raise ArgumentError(
            "scale",
            expected=f"{system.size} numbers of at least zero, not all of them zero",
            found=f"shape {array.shape}",
            remedy="give one relative size per variable of the system",
        )
    return array
