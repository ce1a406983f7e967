"""The logistic law, dE/dt = lambda E (1 - E/Es), the quadratic hypothesis of Lorenz.

Lorenz (1969, 1982), Tellus (from memory).
"""

from __future__ import annotations

import numpy as np

from ensemble_horizon.growth.clock import Clock
from ensemble_horizon.growth.law import Form, Law, split
from ensemble_horizon.growth.starts import scan_logistic


class LogisticForm(Form):
    """Fitted as 1/f = -u + exp(-c - k t).

    u = -1/Es, so a curve that shows no saturation ends at the bound u = 0 and not at infinity;
    the signs are those that leave the fewest array operations to the derivatives.
    """

    lower = (-np.inf, -np.inf, 0.0)
    upper = (0.0, np.inf, np.inf)

    def evaluate(self, theta: np.ndarray, clock: Clock) -> tuple[np.ndarray, list[np.ndarray]]:
        """See `Form.evaluate`."""
        deficit = clock.decay(theta[2], theta[1])
        value = np.subtract(deficit, theta[0], out=clock.room("value", theta.shape[1]))
        np.reciprocal(value, out=value)
        deficit *= value
        slope = np.multiply(clock.time, deficit, out=clock.room("slope", theta.shape[1]))
        return value, [value, deficit, slope]

    def starts(
        self, clock: Clock, curve: np.ndarray, weight: np.ndarray | None, log: bool
    ) -> list[np.ndarray]:
        """See `Form.starts`."""
        level, depth, rate = scan_logistic(clock, curve, weight, log)
        return [np.stack([-level, -depth, rate])]

    def natural(
        self, theta: np.ndarray, scale: np.ndarray, span: float
    ) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
        """See `Form.natural`."""
        level, rate = -theta[0], theta[2]
        opening = np.exp(-theta[1])
        unit = 1.0 / (level + opening)
        endless = level <= 0
        ceiling = 1.0 / np.where(endless, 1.0, level)
        slope = np.zeros((3, 3, scale.size))
        slope[0, 0] = unit * unit * scale
        slope[0, 1] = slope[0, 0] * opening
        slope[1, 2] = 1.0 / span
        slope[2, 0] = np.where(endless, 0.0, ceiling * ceiling * scale)
        held = np.zeros(theta.shape, dtype=bool)
        held[2] = endless
        held[1] = rate <= 0
        saturation = np.where(endless, np.inf, ceiling * scale)
        return np.stack([unit * scale, rate / span, saturation]), slope, held


class Logistic(Law):
    """E = Es / (1 + (Es/E0 - 1) exp(-lambda t)).

    Parameters (initial_error, growth_rate, saturation). An infinite saturation gives the
    exponential law.

    Examples
    --------
    >>> law = LOGISTIC
    >>> law.value(np.array([[0.1, 1.0, 1.0]]), np.array([0.0, np.log(9.0)])).round(6)
    array([[0.1, 0.5]])
    """

    def value(self, parameters: np.ndarray, lead: np.ndarray) -> np.ndarray:
        """See `Law.value`."""
        initial, rate, ceiling = split(parameters, column=True)
        level = 1.0 / ceiling
        return np.asarray(1.0 / (level + (1.0 / initial - level) * np.exp(-rate * lead)))

    def jacobian(self, parameters: np.ndarray, lead: np.ndarray) -> np.ndarray:
        """See `Law.jacobian`."""
        initial, rate, ceiling = split(parameters, column=True)
        level = 1.0 / ceiling
        fall = np.exp(-rate * lead)
        gap = 1.0 / initial - level
        square = (level + gap * fall) ** -2.0
        by_initial = square * fall / initial**2
        by_rate = square * gap * fall * lead
        by_ceiling = square * (1.0 - fall) * level**2
        return np.stack([by_initial, by_rate, by_ceiling], axis=1)

    def rate_at(self, parameters: np.ndarray, size: np.ndarray) -> np.ndarray:
        """See `Law.rate_at`."""
        _, rate, ceiling = split(parameters)
        return np.asarray(rate * (1.0 - np.asarray(size, dtype=float) / ceiling))

    def growth_rate(
        self, parameters: np.ndarray, size: np.ndarray | float | None = None
    ) -> np.ndarray:
        """See `Law.growth_rate`."""
        return self.rate_at(parameters, np.asarray(0.0 if size is None else size))

    def time_between(
        self, parameters: np.ndarray, small: np.ndarray | float, large: np.ndarray | float
    ) -> np.ndarray:
        """Logarithm of (1/small - 1/Es) / (1/large - 1/Es), over the rate."""
        _, rate, ceiling = split(parameters)
        level = 1.0 / ceiling
        first, last = 1.0 / np.asarray(small, dtype=float), 1.0 / np.asarray(large, dtype=float)
        with np.errstate(divide="ignore", invalid="ignore"):
            time = np.log((first - level) / (last - level)) / rate
        return np.where(last <= level, np.inf, time)

    def saturation(self, parameters: np.ndarray) -> np.ndarray:
        """The parameter Es."""
        return split(parameters)[2]


LOGISTIC = Logistic("logistic", ("initial_error", "growth_rate", "saturation"), LogisticForm())
