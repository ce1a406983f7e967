"""The power law, dE/dt = c E^(1 - p), 0 < p <= 1: errors that double the faster the smaller.

Upscale growth: Lorenz (1969), Tellus; Brisch and Kantz (2019), New Journal of Physics (from
memory). A perfect start still has a horizon, T(A) = A^p / (c p).
"""

from __future__ import annotations

import numpy as np

from ensemble_horizon.growth.clock import Clock
from ensemble_horizon.growth.law import Form, Law, split
from ensemble_horizon.growth.starts import scan_power

SMALLEST = 1e-6
FLOOR = 1e-15


class PowerForm(Form):
    """Fitted as ln f = b + ln r + g ln(r)/w with r = 1 - w (1 - t), so that p = w/(w + g).

    b is the logarithm of the error at the last lead. All bounds are plain ones: w = 1 is a
    perfect start, g = 0 a straight line (p = 1), and w -> 0 the exponential law with rate g.
    """

    lower = (-np.inf, SMALLEST, 0.0)
    upper = (np.inf, 1.0, np.inf)

    def evaluate(self, theta: np.ndarray, clock: Clock) -> tuple[np.ndarray, list[np.ndarray]]:
        """See `Form.evaluate`."""
        last, share, bend = theta
        back = 1.0 - clock.time
        rest = np.maximum(1.0 - share * back, FLOOR)
        logarithm = np.log(rest)
        shape = logarithm / share
        value = np.exp(last + logarithm + bend * shape)
        by_share = (-back / rest) * (1.0 + bend / share) - bend * shape / share
        tiny = share < 1e-3
        if tiny.any():
            some, x = bend[tiny], share[tiny] * back
            series = -some * back**2 * (0.5 + x / 1.5 + 0.75 * x**2 + 0.8 * x**3)
            by_share[:, tiny] = -back / rest[:, tiny] + series
        return value, [np.broadcast_to(1.0, value.shape), by_share, shape]

    def starts(
        self, clock: Clock, curve: np.ndarray, weight: np.ndarray | None, log: bool
    ) -> list[np.ndarray]:
        """See `Form.starts`."""
        return [scan_power(clock, curve, weight, log)]

    def natural(
        self, theta: np.ndarray, scale: np.ndarray, span: float
    ) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
        """See `Form.natural`."""
        last, share, bend = theta
        perfect = share >= 1.0
        held = np.stack([perfect, np.zeros_like(perfect), (bend <= 0) | (share <= SMALLEST)])
        safe = np.where(perfect, 0.5, share)
        size = last + np.log(scale)
        start = np.log1p(-safe)
        initial = np.where(perfect, 0.0, np.exp(size + (1.0 + bend / safe) * start))
        total = share + bend
        power = share / total
        power_by_share, power_by_bend = bend / total**2, -share / total**2
        coefficient = np.exp(power * size) * total / span
        slope = np.zeros((3, 3, scale.size))
        slope[0, 0] = initial
        slope[0, 1] = initial * (-(1.0 + bend / safe) / (1.0 - safe) - bend * start / safe**2)
        slope[0, 2] = initial * start / safe
        slope[1, 0] = coefficient * power
        slope[1, 1] = coefficient * (power_by_share * size + 1.0 / total)
        slope[1, 2] = coefficient * (power_by_bend * size + 1.0 / total)
        slope[2, 1], slope[2, 2] = power_by_share, power_by_bend
        return np.stack([initial, coefficient, power]), slope, held


class Power(Law):
    """E = (E0^p + c p t)^(1/p), parameters (initial_error, coefficient, exponent).

    ``coefficient`` is c, in units of the curve to the power p per unit of lead; ``exponent`` is p.
    A smaller error always grows faster, so a small-error rate does not exist; `growth_rate` and
    `doubling_time` without a size speak of the initial error.

    Examples
    --------
    >>> POWER.time_to(np.array([[0.0, 0.5, 0.5]]), 4.0)
    array([8.])
    """

    def value(self, parameters: np.ndarray, lead: np.ndarray) -> np.ndarray:
        """See `Law.value`."""
        initial, coefficient, power = split(parameters, column=True)
        return np.asarray((initial**power + coefficient * power * lead) ** (1.0 / power))

    def jacobian(self, parameters: np.ndarray, lead: np.ndarray) -> np.ndarray:
        """See `Law.jacobian`; infinite by E0 where E0 is zero and p below 1."""
        initial, coefficient, power = split(parameters, column=True)
        with np.errstate(divide="ignore", invalid="ignore"):
            start = initial**power
            base = start + coefficient * power * lead
            value = base ** (1.0 / power)
            slope = value / base
            by_initial = np.where(base > 0, slope * start / initial, 1.0)
            start_by_power = np.where(initial > 0, start * np.log(initial), 0.0)
            by_power = slope * (start_by_power + coefficient * lead) / power
            by_power -= np.where(base > 0, value * np.log(base) / power**2, 0.0)
            by_coefficient = slope * lead
        return np.stack([by_initial, by_coefficient, by_power], axis=1)

    def rate_at(self, parameters: np.ndarray, size: np.ndarray) -> np.ndarray:
        """See `Law.rate_at`: c E^(-p)."""
        _, coefficient, power = split(parameters)
        with np.errstate(divide="ignore"):
            return np.asarray(coefficient * np.asarray(size, dtype=float) ** -power)

    def growth_rate(
        self, parameters: np.ndarray, size: np.ndarray | float | None = None
    ) -> np.ndarray:
        """See `Law.growth_rate`; without a size, the rate of the initial error."""
        return self.rate_at(
            parameters, self.initial_error(parameters) if size is None else np.asarray(size)
        )

    def doubling_time(
        self, parameters: np.ndarray, size: np.ndarray | float | None = None
    ) -> np.ndarray:
        """See `Law.doubling_time`; without a size, the time from E0 to 2 E0."""
        start = self.initial_error(parameters) if size is None else np.asarray(size, dtype=float)
        return self.time_between(parameters, start, 2.0 * start)

    def time_between(
        self, parameters: np.ndarray, small: np.ndarray | float, large: np.ndarray | float
    ) -> np.ndarray:
        """(large^p - small^p) / (c p)."""
        _, coefficient, power = split(parameters)
        first, last = np.asarray(small, dtype=float), np.asarray(large, dtype=float)
        with np.errstate(divide="ignore"):
            return np.asarray((last**power - first**power) / (coefficient * power))

    def saturation(self, parameters: np.ndarray) -> np.ndarray:
        """NaN: this law has none."""
        return np.full(len(split(parameters)[0]), np.nan)


POWER = Power("power", ("initial_error", "coefficient", "exponent"), PowerForm())
