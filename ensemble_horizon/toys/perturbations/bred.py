"""Bred vectors: what grows beside the control, brought back to its first size again and again."""

from __future__ import annotations

from dataclasses import dataclass
from typing import ClassVar, NamedTuple

import numpy as np
import numpy.typing as npt

from ensemble_horizon.checks import require_choice, require_positive
from ensemble_horizon.errors import ArgumentError
from ensemble_horizon.toys.dynamics import System, require_states
from ensemble_horizon.toys.integration import integrate
from ensemble_horizon.toys.norms import Array, Norm
from ensemble_horizon.toys.perturbations.method import (
    Perturbation,
    Start,
    require_option,
    require_whole,
    steps_of,
)
from ensemble_horizon.toys.perturbations.past import require_arrival, require_past

SOURCE = "Toth and Kalnay 1993, Bull. Amer. Meteor. Soc. 74; 1997, Mon. Wea. Rev. 125 (from memory)"


class Bred(NamedTuple):
    """What breeding gives.

    ``control`` (..., N) at the end, ``vectors`` (..., members, N) of the amplitude there, and
    ``rates`` (cycles, ..., members), the exponential growth rate over each cycle per unit of time.
    """

    control: Array
    vectors: Array
    rates: Array


def bred_vectors(
    system: System,
    past: npt.ArrayLike,
    members: int,
    *,
    amplitude: float,
    cycle: float,
    cycles: int,
    seed: int,
    norm: str = "euclidean",
    time: float = 0.0,
    dt: float | None = None,
) -> Bred:
    """Breed forward from ``past`` and return the control at the end, the vectors and their growth.

    A Gaussian displacement of the amplitude is added to the control; both are run for a cycle with
    the full equations; their difference is scaled back to the amplitude; and so on. For a small
    amplitude and many cycles the mean rate tends to the leading Lyapunov exponent.

    Parameters
    ----------
    system : System
    past : array (..., N)
        The control before breeding; leading axes (starts) are free.
    members : int
        Vectors bred beside every control.
    amplitude : float
        Their length after every cycle, in the units of the norm.
    cycle : float
        Time from one rescaling to the next, a multiple of ``dt``.
    cycles : int
    seed : int
        Seed of the first displacements.
    norm : str
        A key of ``system.norms()``.
    time : float
        Time of ``past``.
    dt : float, optional
        Time step, ``system.step`` if left out.

    Returns
    -------
    Bred

    Raises
    ------
    ArgumentError
        If an argument is out of range or a run stops being finite.

    Notes
    -----
    Source: Toth and Kalnay 1993, Bull. Amer. Meteor. Soc. 74; 1997, Mon. Wea. Rev. 125 (from
    memory).

    Examples
    --------
    >>> from ensemble_horizon import toys
    >>> lorenz = toys.system("lorenz-63")
    >>> bred = bred_vectors(
    ...     lorenz, toys.settled(lorenz), 2, amplitude=1e-6, cycle=0.5, cycles=400, seed=1
    ... )
    >>> bred.vectors.shape, round(float(bred.rates.mean()), 1)
    ((2, 3), 0.9)
    """
    control = require_states(system, past, "past")
    norms = system.norms()
    measure = norms[require_choice(norm, norms, "norm")]
    length = require_positive(amplitude, "amplitude")
    step, steps = steps_of(system, require_positive(cycle, "cycle"), dt, "cycle")
    random = np.random.default_rng(require_whole(seed, "seed", 0))
    shape = (*control.shape[:-1], require_whole(members, "members"), system.size)
    first = measure.restore(random.standard_normal(shape))
    return _breed(
        system, control, first, measure, length, steps, require_whole(cycles, "cycles"), step, time
    )


def _breed(
    system: System,
    control: Array,
    first: Array,
    measure: Norm,
    amplitude: float,
    steps: int,
    cycles: int,
    dt: float,
    time: float,
) -> Bred:
    vectors = first * (amplitude / measure.length(first))[..., None]
    rates = np.empty((cycles, *vectors.shape[:-1]))
    for number in range(cycles):
        together = np.concatenate([control[..., None, :], control[..., None, :] + vectors], axis=-2)
        begin = time + number * steps * dt
        later = integrate(system, together, steps, dt, steps, begin).states[-1]
        control = later[..., 0, :]
        vectors = later[..., 1:, :] - later[..., :1, :]
        length = measure.length(vectors)
        if not np.all(length > 0):
            raise ArgumentError(
                f"bred vectors of {system.name}",
                expected="runs that differ from the control after a cycle",
                found=f"no difference left in cycle {number + 1}",
                remedy="take a larger amplitude or shorter cycles: it has sunk below rounding",
            )
        rates[number] = np.log(length / amplitude) / (steps * dt)
        vectors = vectors * (amplitude / length)[..., None]
    return Bred(control, vectors, rates)


@dataclass(frozen=True, kw_only=True, eq=False)
class BredVectors(Perturbation):
    """Bred vectors of the run that leads from ``past`` to the start.

    Parameters
    ----------
    past : array (N,)
        The control ``cycles * cycle`` before the start; running it on must give the start.
    cycle : float
        Time from one rescaling to the next, a multiple of ``dt``.
    cycles : int
        Number of them.
    dt : float, optional
        Time step, ``system.step`` if left out.
    """

    past: npt.ArrayLike | None = None
    cycle: float | None = None
    cycles: int = 10
    dt: float | None = None

    name: ClassVar[str] = "bred-vectors"
    title: ClassVar[str] = "Bred vectors: differences grown and rescaled along the run"
    source: ClassVar[str] = SOURCE

    def displacements(self, start: Start, members: int, random: np.random.Generator) -> Array:
        """Return the vectors (members, N) at the end of the last cycle."""
        amplitude = require_positive(start.amplitude or 0.0, "amplitude")
        cycle = require_option(self.cycle, "cycle", "the time from one rescaling to the next")
        cycles = require_whole(self.cycles, "cycles")
        dt, steps = steps_of(start.system, cycle, self.dt, "cycle")
        span = cycles * steps * dt
        past = require_past(start, self.past, span)
        first = start.measure.restore(random.standard_normal((members, start.system.size)))
        begin = start.time - span
        bred = _breed(start.system, past, first, start.measure, amplitude, steps, cycles, dt, begin)
        require_arrival(start, bred.control, span)
        return bred.vectors
