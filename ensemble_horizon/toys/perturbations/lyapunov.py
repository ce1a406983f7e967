"""Backward Lyapunov vectors: the orthogonal directions that the past has singled out."""

from __future__ import annotations

from dataclasses import dataclass
from typing import ClassVar, NamedTuple

import numpy as np
import numpy.typing as npt

from ensemble_horizon.checks import require_choice, require_positive
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
from ensemble_horizon.toys.perturbations.past import require_arrival, require_past, tangent_run

# Steps from one orthonormalisation to the next: a stable explicit step shrinks or stretches by
# less than e^3, so five of them leave ten digits of the weakest direction.
EVERY = 5


class Backward(NamedTuple):
    """``control`` (..., N) at the end and ``vectors`` (..., count, N), orthonormal in the norm."""

    control: Array
    vectors: Array


def lyapunov_vectors(
    system: System,
    past: npt.ArrayLike,
    count: int,
    span: float,
    norm: str = "euclidean",
    *,
    seed: int = 0,
    time: float = 0.0,
    dt: float | None = None,
) -> Backward:
    """Return the leading backward Lyapunov vectors at the end of a run of length ``span``.

    Random displacements are carried by the tangent of the run and orthonormalised as they go, by
    the same repeated QR that gives the Lyapunov exponents. The first k of them come to span the
    k-volume that has grown most, whatever they began with; the first is the direction to which
    bred vectors of small amplitude turn. They depend on the norm by their orthogonality only.

    Parameters
    ----------
    system : System
    past : array (..., N)
        The control at the beginning; leading axes (starts) are free.
    count : int
        Number of vectors, at most N.
    span : float
        Length of the run, a multiple of ``dt``: long against 1 over the smallest gap between
        neighbouring exponents.
    norm : str
        A key of ``system.norms()``.
    seed : int
        Seed of the first displacements, forgotten in the course of the run.
    time : float
        Time of ``past``.
    dt : float, optional
        Time step, ``system.step`` if left out.

    Returns
    -------
    Backward
        Vectors of length 1 in the norm, their largest entry positive.

    Raises
    ------
    ArgumentError
        If an argument is out of range, or more vectors are asked for than there are variables.

    Notes
    -----
    Source: Benettin et al. 1980, Meccanica 15; Legras and Vautard 1996, ECMWF Seminar on
    Predictability (from memory).

    Examples
    --------
    >>> from ensemble_horizon import toys
    >>> lorenz = toys.system("lorenz-63")
    >>> found = lyapunov_vectors(lorenz, toys.settled(lorenz), 3, 20.0)
    >>> bool(np.allclose(found.vectors @ found.vectors.T, np.eye(3)))
    True
    """
    control = require_states(system, past, "past")
    norms = system.norms()
    measure = norms[require_choice(norm, norms, "norm")]
    wanted = require_whole(count, "count")
    things = f"variables of {system.name}"
    require_at_most(wanted, system.size, "count", things, "take a smaller count")
    step, steps = steps_of(system, require_positive(span, "span"), dt, "span")
    random = np.random.default_rng(require_whole(seed, "seed", 0))
    return _carry(system, control, wanted, measure, steps, step, time, random)


def _carry(
    system: System,
    control: Array,
    count: int,
    measure: Norm,
    steps: int,
    dt: float,
    time: float,
    random: np.random.Generator,
) -> Backward:
    first = random.standard_normal((*control.shape[:-1], count, system.size))
    vectors = measure.restore(_orthonormal(first))
    for done in range(0, steps, EVERY):
        block = min(EVERY, steps - done)
        begin = time + done * dt
        control, vectors = tangent_run(system, control, vectors, block, dt, begin)
        vectors = measure.restore(_orthonormal(measure.flatten(vectors)))
    return Backward(control, signed(vectors))


def _orthonormal(rows: Array) -> Array:
    """Return orthonormal rows (..., K, N), the first k of which span what the first k did."""
    return np.swapaxes(np.linalg.qr(np.swapaxes(rows, -1, -2)).Q, -1, -2)


@dataclass(frozen=True, kw_only=True, eq=False)
class BackwardLyapunovVectors(Perturbation):
    """Backward Lyapunov vectors of the run that leads from ``past`` to the start.

    Member m lies along vector m, so there are at most N members (2 N if paired). With ``count``
    k every member is a random sum of the leading k vectors instead, all weighing the same, and
    there may be any number of members.

    Parameters
    ----------
    past : array (N,)
        The control ``span`` before the start; running it on must give the start.
    span : float
        Length of that run, a multiple of ``dt``.
    count : int, optional
        Number of leading vectors summed, at least 2.
    dt : float, optional
        Time step, ``system.step`` if left out.
    """

    past: npt.ArrayLike | None = None
    span: float | None = None
    count: int | None = None
    dt: float | None = None

    name: ClassVar[str] = "backward-lyapunov-vectors"
    title: ClassVar[str] = "Backward Lyapunov vectors: orthogonal directions of past growth"
    source: ClassVar[str] = "Benettin et al. 1980, Meccanica 15; Legras and Vautard 1996"

    def displacements(self, start: Start, members: int, random: np.random.Generator) -> Array:
        """Return the vectors, or their random sums, (members, N)."""
        system = start.system
        wanted = vectors_needed(members, self.count, system.size, system.name)
        span = require_option(self.span, "span", "the length of the run up to the start")
        dt, steps = steps_of(system, span, self.dt, "span")
        past = require_past(start, self.past, span)
        begin = start.time - steps * dt
        # A stream of its own, so that the sums do not depend on how many vectors were carried.
        streams = random.spawn(2)
        found = _carry(system, past, wanted, start.measure, steps, dt, begin, streams[0])
        require_arrival(start, found.control, span)
        return combined(found.vectors, members, self.count, streams[1])
