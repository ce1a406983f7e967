"""Singular vectors: the displacements that grow most over a given time."""

from __future__ import annotations

from dataclasses import dataclass
from typing import ClassVar, NamedTuple

import numpy as np
import numpy.typing as npt
import scipy.linalg

from ensemble_horizon.checks import require_choice, require_positive
from ensemble_horizon.errors import ArgumentError
from ensemble_horizon.toys.dynamics import System, require_states
from ensemble_horizon.toys.norms import Array, Norm
from ensemble_horizon.toys.perturbations.method import (
    Perturbation,
    Start,
    combined,
    require_at_most,
    require_option,
    require_whole,
    signed,
    steps_of,
    vectors_needed,
)
from ensemble_horizon.toys.perturbations.past import tangent_run

# The propagator is a full matrix, and its columns are one tangent run each.
LARGEST = 1500
COLUMNS = 128


class Singular(NamedTuple):
    """``vectors`` (count, N) of length 1 at the start, and the factors ``growth`` (count,)."""

    vectors: Array
    growth: Array


def singular_vectors(
    system: System,
    state: npt.ArrayLike,
    window: float,
    count: int,
    norm: str = "euclidean",
    *,
    time: float = 0.0,
    dt: float | None = None,
) -> Singular:
    """Return the leading singular vectors of the run from ``state`` over ``window``.

    With the tangent propagator M and the norm |d| = |L d|, they are the right singular vectors of
    L M L^-1, carried back by L^-1. The first is the displacement whose norm grows most over the
    window of all infinitesimal displacements; the second of all those orthogonal to it, and so on.
    The norm is the same at both ends.

    Parameters
    ----------
    system : System
        Of at most 1500 variables.
    state : array (N,)
        The control at the start.
    window : float
        Time over which growth is counted, a multiple of ``dt``.
    count : int
        Number of vectors, at most N.
    norm : str
        A key of ``system.norms()``.
    time : float
        Time of ``state``.
    dt : float, optional
        Time step, ``system.step`` if left out.

    Returns
    -------
    Singular
        Vectors of length 1 in the norm, their largest entry positive, and the factors by which
        they grow, falling. Factors below 1e-16 of the first are lost in rounding.

    Raises
    ------
    ArgumentError
        If an argument is out of range, or more vectors are asked for than there are variables.

    Notes
    -----
    Source: Lorenz 1965, Tellus 17; Buizza and Palmer 1995, J. Atmos. Sci. 52 (from memory).

    Examples
    --------
    A spiral sink shrinks all displacements alike, by exp(-a t):

    >>> from ensemble_horizon import toys
    >>> sink = toys.system("spiral-sink", decay=0.5)
    >>> singular_vectors(sink, [1.0, 0.0], 2.0, 2).growth.round(6).tolist()
    [0.367879, 0.367879]
    """
    control = require_states(system, state, "state")
    if control.ndim != 1:
        raise ArgumentError(
            "state",
            expected=f"one state of {system.size} variables",
            found=f"shape {control.shape}",
            remedy="find the vectors of one start at a time",
        )
    norms = system.norms()
    measure = norms[require_choice(norm, norms, "norm")]
    wanted = require_whole(count, "count")
    things = f"variables of {system.name}"
    require_at_most(wanted, system.size, "count", things, "take a smaller count")
    step, steps = steps_of(system, require_positive(window, "window"), dt, "window")
    return _decompose(Start(system, control, time, measure, None), steps, step, wanted)


def _decompose(start: Start, steps: int, dt: float, count: int) -> Singular:
    matrix = propagator(start.system, start.control, start.measure, steps, dt, start.time)
    _, growth, rows = scipy.linalg.svd(matrix)
    return Singular(signed(start.measure.restore(rows[:count])), growth[:count])


def propagator(
    system: System, state: Array, measure: Norm, steps: int, dt: float, time: float
) -> Array:
    """Return L M L^-1 (N, N): the tangent of the run, in coordinates whose length is the norm."""
    if system.size > LARGEST:
        raise ArgumentError(
            f"singular vectors of {system.name}",
            expected=f"a system of at most {LARGEST} variables",
            found=f"{system.size}",
            remedy="take a smaller system, or method='bred-vectors'",
        )
    unit = np.eye(system.size)
    columns = []
    for first in range(0, system.size, COLUMNS):
        moved = measure.restore(unit[first : first + COLUMNS])
        _, moved = tangent_run(system, state, moved, steps, dt, time)
        columns.append(measure.flatten(moved))
    return np.concatenate(columns).T


@dataclass(frozen=True, kw_only=True, eq=False)
class SingularVectors(Perturbation):
    """Singular vectors of the run that begins at the start.

    Member m lies along vector m, so there are at most N members (2 N if paired). With ``count``
    k every member is a random sum of the leading k vectors instead, all weighing the same, and
    there may be any number of members.

    Parameters
    ----------
    window : float
        Time over which growth is counted, a multiple of ``dt``.
    count : int, optional
        Number of leading vectors summed, at least 2.
    dt : float, optional
        Time step, ``system.step`` if left out.
    """

    window: float | None = None
    count: int | None = None
    dt: float | None = None

    name: ClassVar[str] = "singular-vectors"
    title: ClassVar[str] = "Singular vectors: the fastest growth over a given time"
    source: ClassVar[str] = "Lorenz 1965, Tellus 17; Buizza and Palmer 1995, J. Atmos. Sci. 52"
    nested: ClassVar[bool] = True

    def displacements(self, start: Start, members: int, random: np.random.Generator) -> Array:
        """Return the vectors, or their random sums, (members, N)."""
        system = start.system
        wanted = vectors_needed(members, self.count, system.size, system.name)
        window = require_option(self.window, "window", "the time over which growth is counted")
        dt, steps = steps_of(system, window, self.dt, "window")
        found = _decompose(start, steps, dt, wanted)
        return combined(found.vectors, members, self.count, random)
