"""The record every method of perturbation is, and the checks that all of them share."""

from __future__ import annotations

from abc import ABC, abstractmethod
from dataclasses import dataclass
from typing import ClassVar, NamedTuple

import numpy as np

from ensemble_horizon.checks import require_positive
from ensemble_horizon.errors import ArgumentError
from ensemble_horizon.toys.dynamics import System
from ensemble_horizon.toys.norms import Array, Norm


class Start(NamedTuple):
    """Where an ensemble starts: the control (N,) and its time, how the displacements are sized."""

    system: System
    control: Array
    time: float
    measure: Norm
    amplitude: float | None


@dataclass(frozen=True, kw_only=True, eq=False)
class Perturbation(ABC):
    """A method of perturbation; a subclass is a frozen dataclass whose fields are its options.

    Attributes
    ----------
    name, title, source : str
        Name in the registry, one line for people, the publication.
    own_size : bool
        The displacements have a size of their own, so that an amplitude may be left out.
    nested : bool
        Member m is the same, bit for bit, however many members are asked for. Where it is False,
        members agree to within rounding, unless the options fix the number of vectors combined.
    """

    name: ClassVar[str]
    title: ClassVar[str]
    source: ClassVar[str]
    own_size: ClassVar[bool] = False
    nested: ClassVar[bool] = False

    @abstractmethod
    def displacements(self, start: Start, members: int, random: np.random.Generator) -> Array:
        """Return displacements (members, N) from the control, none of them zero, of any length."""


def require_whole(value: int, argument: str, minimum: int = 1) -> int:
    """Return ``value`` if it is a whole number of at least ``minimum``."""
    if isinstance(value, bool) or not isinstance(value, int | np.integer) or value < minimum:
        raise ArgumentError(
            argument,
            expected=f"a whole number of at least {minimum}",
            found=repr(value),
            remedy="correct the number",
        )
    return int(value)


def require_option(value: float | None, option: str, meaning: str) -> float:
    """Return the option ``value`` if it was given and is above zero."""
    if value is None:
        raise ArgumentError(
            option, expected=meaning, found="nothing", remedy=f"give {option}= as an option"
        )
    return require_positive(value, option)


def steps_in(duration: float, dt: float, argument: str) -> int:
    """Return how many steps of ``dt`` make up ``duration``, which must be a whole number.

    Examples
    --------
    >>> steps_in(0.3, 0.1, "window")
    3
    """
    steps = round(duration / dt)
    if steps < 1 or abs(steps * dt - duration) > 1e-6 * dt:
        raise ArgumentError(
            argument,
            expected=f"a multiple of the time step {dt:g}",
            found=f"{duration:g}",
            remedy=f"take {max(steps, 1) * dt:g}, or another dt",
        )
    return steps


def steps_of(system: System, duration: float, dt: float | None, argument: str) -> tuple[float, int]:
    """Return the time step, that of ``system`` if none is given, and how many of it there are."""
    step = system.step if dt is None else require_positive(dt, "dt")
    return step, steps_in(duration, step, argument)


def require_at_most(count: int, limit: int, argument: str, things: str, remedy: str) -> None:
    """Raise `ArgumentError` naming both numbers if ``count`` is above ``limit``."""
    if count > limit:
        raise ArgumentError(
            argument, expected=f"at most the {limit} {things}", found=str(count), remedy=remedy
        )


def combined(vectors: Array, members: int, count: int | None, random: np.random.Generator) -> Array:
    """Return one of ``vectors`` (K, N) per member, or with a ``count`` random sums of all K.

    The vectors are orthonormal in the norm and the weights independent standard normal, so that no
    direction in the space they span is preferred.
    """
    if count is None:
        return vectors
    # Member by member, so that the order of summation does not depend on how many there are.
    return np.stack([weights @ vectors for weights in random.standard_normal((members, count))])


def vectors_needed(members: int, count: int | None, size: int, system: str) -> int:
    """Return how many vectors to compute: ``count``, or one per member if it is left out."""
    if count is not None:
        wanted = require_whole(count, "count", 2)
        remedy = "take a smaller count"
        require_at_most(wanted, size, "count", f"variables of {system}", remedy)
        return wanted
    remedy = "ask for fewer members, or give count= to combine the leading vectors at random"
    require_at_most(members, size, "members", f"variables of {system}", remedy)
    return members


def signed(vectors: Array) -> Array:
    """Return ``vectors`` (..., N) with the sign that makes their largest entry positive."""
    place = np.argmax(np.abs(vectors), axis=-1)[..., None]
    return np.asarray(vectors * np.sign(np.take_along_axis(vectors, place, axis=-1)))
