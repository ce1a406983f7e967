"""The record of Lyapunov exponents, and what follows from them."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from ensemble_horizon.errors import ArgumentError
from ensemble_horizon.toys.norms import Array


@dataclass(frozen=True)
class Estimate:
    """A number with its interval and units."""

    value: float
    low: float
    high: float
    units: str


@dataclass(frozen=True, eq=False)
class Exponents:
    """Lyapunov exponents of a system, in descending order.

    Attributes
    ----------
    system : str
        Name of the system.
    exponents, low, high : array (k,)
        The exponents and the interval of each, per unit of ``time_units``.
    confidence : float
        Of the intervals, each taken by itself.
    length : float
        Model time averaged over, all members together.
    time_units : str
        ``"1"``, ``"day"`` or ``"hours"``.
    hours_per_time_unit : float or None
        None where time is non-dimensional.
    size : int
        Number of variables, N.
    covariance : array (k, k)
        Of the sampling errors of ``exponents``.
    quantile : float
        Student's t by which sampling errors are multiplied.
    allowance : array (k,)
        The part of the half-width that is not sampling: time step, and growth rates still falling.
    sum : Estimate
        Sum of the k exponents, the rate at which volumes of k dimensions grow; of all N it is the
        mean divergence of the flow.
    members, step : int, float
        Independent runs, and the time step they were made with.

    Examples
    --------
    >>> found = Exponents(
    ...     "example", np.array([0.9, 0.0, -14.6]), np.array([0.89, -0.01, -14.61]),
    ...     np.array([0.91, 0.01, -14.59]), 0.9, 1e4, "1", None, 3, np.zeros((3, 3)), 1.7,
    ...     np.full(3, 0.01), Estimate(-13.7, -13.7, -13.7, "1"), 20, 0.01,
    ... )
    >>> round(found.dimension.value, 3), round(found.doubling_time.value, 3), found.positive
    (2.062, 0.77, 1)
    """

    system: str
    exponents: Array
    low: Array
    high: Array
    confidence: float
    length: float
    time_units: str
    hours_per_time_unit: float | None
    size: int
    covariance: Array
    quantile: float
    allowance: Array
    sum: Estimate
    members: int
    step: float

    @property
    def positive(self) -> int:
        """How many exponents lie above zero with their whole interval."""
        return int(np.count_nonzero(self.low > 0))

    @property
    def not_negative(self) -> int:
        """How many exponents may lie above zero: those whose interval reaches there."""
        return int(np.count_nonzero(self.high > 0))

    @property
    def dimension(self) -> Estimate:
        """Kaplan-Yorke dimension j + (l_1 + ... + l_j) / |l_(j+1)|.

        j is the largest number of leading exponents with a sum of at least zero; exponents whose
        interval holds zero count as zero. The interval follows to first order in the exponents.
        Source: Kaplan and Yorke 1979, in Functional Differential Equations and Approximation of
        Fixed Points, Springer (from memory).

        Raises
        ------
        ArgumentError
            If the exponents known do not reach the point where their sum turns negative, or their
            interval leaves open whether it does.
        """
        exponents = np.where((self.low <= 0) & (self.high >= 0), 0.0, self.exponents)
        sums = np.cumsum(exponents)
        if exponents.size == self.size and self.sum.high >= 0:
            self._require_volume_kept(exponents)
            return Estimate(float(self.size), float(self.size), float(self.size), "1")
        whole = int(np.count_nonzero(np.cumsum(sums < 0) == 0))
        if whole == exponents.size:
            raise ArgumentError(
                f"dimension of {self.system}",
                expected="enough exponents for their sum to turn negative",
                found=f"{whole} of {self.size}, with the sum {sums[-1]:.3g}",
                remedy=f"ask for a count above {whole}",
            )
        if whole == 0:
            return Estimate(0.0, 0.0, 0.0, "1")
        above, below = sums[whole - 1], -exponents[whole]
        slope = np.zeros(exponents.size)
        slope[:whole] = 1.0 / below
        slope[whole] = above / below**2
        sampling = self.quantile * np.sqrt(max(float(slope @ self.covariance @ slope), 0.0))
        half = float(sampling + slope @ self.allowance)
        value = float(whole + above / below)
        return Estimate(value, value - half, value + half, "1")

    @property
    def doubling_time(self) -> Estimate:
        """Doubling time of small errors, ln 2 over the leading exponent, in ``time_units``.

        Raises
        ------
        ArgumentError
            If the leading exponent is not above zero with its whole interval.
        """
        leading, low, high = (float(x[0]) for x in (self.exponents, self.low, self.high))
        if low <= 0:
            raise ArgumentError(
                f"doubling time of {self.system}",
                expected="a leading exponent above zero",
                found=f"{leading:.3g}, interval {low:.3g} to {high:.3g}",
                remedy="errors do not double if it is zero or below; if the interval only reaches "
                "zero, take a greater length",
            )
        value, least, most = (float(np.log(2.0) / x) for x in (leading, high, low))
        return Estimate(value, least, most, self.time_units)

    @property
    def doubling_hours(self) -> Estimate:
        """The doubling time in hours.

        Raises
        ------
        ArgumentError
            As for `doubling_time`, and if the system has no physical clock.
        """
        time, hours = self.doubling_time, self.hours_per_time_unit
        if hours is None:
            raise ArgumentError(
                f"doubling time of {self.system} in hours",
                expected="a system with a physical clock",
                found="non-dimensional time",
                remedy="take doubling_time and say how long a unit of model time is",
            )
        return Estimate(time.value * hours, time.low * hours, time.high * hours, "hours")

    def _require_volume_kept(self, exponents: Array) -> None:
        """Refuse to call a sum zero that is only too uncertain to be called negative."""
        largest = float(np.abs(exponents).max())
        if -self.sum.low > 0.1 * largest > 0:
            raise ArgumentError(
                f"dimension of {self.system}",
                expected="a sum of the exponents that is surely negative, or zero",
                found=f"an interval of the sum from {self.sum.low:.3g} to {self.sum.high:.3g}",
                remedy="take a greater length",
            )
