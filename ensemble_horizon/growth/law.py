"""What a law of error growth is.

A `Law` speaks in the parameters people quote (initial error, rate, saturation). Its `Form` is the
same law in the parameters a fit converges fastest in, on curves and leads scaled to one.

Parameters are arrays (N, P), lead times (L,), sizes (N,) or scalars. Lead times and rates are in
the units of the lead times, sizes in those of the curve.
"""

from __future__ import annotations

from abc import ABC, abstractmethod
from dataclasses import dataclass
from typing import ClassVar

import numpy as np

from ensemble_horizon.growth.clock import Clock

LN2 = float(np.log(2.0))


@dataclass(frozen=True)
class Form(ABC):
    """A law in the parameters it is fitted in; arrays are lead-major: (L, n), (P, n).

    Curves are scaled to a largest value of one and leads to a last value of one.
    """

    lower: ClassVar[tuple[float, ...]]
    upper: ClassVar[tuple[float, ...]]

    @abstractmethod
    def evaluate(self, theta: np.ndarray, clock: Clock) -> tuple[np.ndarray, list[np.ndarray]]:
        """Value f (L, n) and the derivatives of ln f by each parameter, P arrays (L, n).

        Where the parameters make no sense, f is NaN.
        """

    def bend(
        self, theta: np.ndarray, value: np.ndarray, slopes: list[np.ndarray], log: bool
    ) -> np.ndarray | None:
        """Second derivative of f (ln f if ``log``) by the first parameter, if a fit needs it."""
        return None

    @abstractmethod
    def starts(
        self, clock: Clock, curve: np.ndarray, weight: np.ndarray | None, log: bool
    ) -> list[np.ndarray]:
        """First guesses, arrays (P, n), for curves (L, n) that hold 0 where ``weight`` is 0."""

    @abstractmethod
    def natural(
        self, theta: np.ndarray, scale: np.ndarray, span: float
    ) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
        """Parameters of the law, their derivatives by ``theta``, and which are held at a bound.

        Shapes (P, n), (P, P, n) and bool (P, n). ``scale`` (n,) is the largest value of each
        curve, ``span`` the last lead.
        """


@dataclass(frozen=True)
class Law(ABC):
    """A law of error growth.

    Attributes
    ----------
    name : str
        Name in the registry ``LAWS``.
    parameters : tuple of str
        Names of the P parameters, in the order of every parameter array.
    form : Form
        The law as it is fitted.
    may_fall : bool
        Whether the law also describes errors that do not grow.
    least_growth : float
        Relative growth over all leads up to which a fit counts as one that does not grow.
    """

    name: str
    parameters: tuple[str, ...]
    form: Form

    may_fall: ClassVar[bool] = False
    least_growth: ClassVar[float] = 1e-5

    @abstractmethod
    def value(self, parameters: np.ndarray, lead: np.ndarray) -> np.ndarray:
        """Error size at ``lead``, shape (N, L)."""

    @abstractmethod
    def jacobian(self, parameters: np.ndarray, lead: np.ndarray) -> np.ndarray:
        """Derivatives of `value` by the parameters, shape (N, P, L)."""

    @abstractmethod
    def rate_at(self, parameters: np.ndarray, size: np.ndarray) -> np.ndarray:
        """Growth rate d ln E / dt at the given size, shape (N,)."""

    @abstractmethod
    def time_between(
        self, parameters: np.ndarray, small: np.ndarray | float, large: np.ndarray | float
    ) -> np.ndarray:
        """Time the error takes from ``small`` to ``large``, shape (N,).

        Infinite where ``large`` is never reached; negative where ``large`` comes first.
        """

    @abstractmethod
    def growth_rate(
        self, parameters: np.ndarray, size: np.ndarray | float | None = None
    ) -> np.ndarray:
        """Growth rate of a small error, or of one of the given size, shape (N,)."""

    @abstractmethod
    def saturation(self, parameters: np.ndarray) -> np.ndarray:
        """Size at which growth ends, shape (N,); NaN for a law that knows none."""

    def log_jacobian(self, parameters: np.ndarray, lead: np.ndarray) -> np.ndarray:
        """Derivatives of the logarithm of `value` by the parameters, shape (N, P, L)."""
        with np.errstate(divide="ignore", invalid="ignore"):
            slope: np.ndarray = (
                self.jacobian(parameters, lead) / self.value(parameters, lead)[:, None, :]
            )
        return slope

    def initial_error(self, parameters: np.ndarray) -> np.ndarray:
        """Error size at lead zero, shape (N,)."""
        return np.asarray(parameters, dtype=float)[:, self.parameters.index("initial_error")]

    def time_to(self, parameters: np.ndarray, size: np.ndarray | float) -> np.ndarray:
        """First lead time at which the error is at least ``size``, shape (N,).

        Zero where it is so from the start, infinite where it never is, NaN for NaN parameters.
        """
        initial = self.initial_error(parameters)
        goal = np.broadcast_to(np.asarray(size, dtype=float), initial.shape)
        with np.errstate(all="ignore"):
            time = self.time_between(parameters, initial, goal)
            # A law that falls passes smaller sizes later, but never grows into a larger one.
            time = np.where(time < 0, np.inf, time)
        return np.where(goal <= initial, 0.0, time)

    def doubling_time(
        self, parameters: np.ndarray, size: np.ndarray | float | None = None
    ) -> np.ndarray:
        """Doubling time of a small error, or time from ``size`` to twice that, shape (N,).

        Infinite where the error never doubles.
        """
        if size is not None:
            start = np.asarray(size, dtype=float)
            with np.errstate(all="ignore"):
                time = self.time_between(parameters, start, 2.0 * start)
            return np.where(time < 0, np.inf, time)
        rate = self.growth_rate(parameters)
        with np.errstate(divide="ignore", invalid="ignore"):
            return np.where(rate > 0, LN2 / rate, np.where(np.isnan(rate), np.nan, np.inf))


def split(parameters: np.ndarray, column: bool = False) -> list[np.ndarray]:
    """Parameters (N, P) as P arrays (N,), or (N, 1) to be broadcast against leads."""
    table = np.atleast_2d(np.asarray(parameters, dtype=float))
    return [table[:, i, None] if column else table[:, i] for i in range(table.shape[1])]
