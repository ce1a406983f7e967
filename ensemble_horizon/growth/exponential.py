"""The exponential law, E = E0 exp(lambda t): errors too small to feel any limit."""

from __future__ import annotations

import numpy as np

from ensemble_horizon.growth.clock import Clock
from ensemble_horizon.growth.law import Form, Law, split
from ensemble_horizon.growth.starts import line_of_logarithm


class ExponentialForm(Form):
    """Fitted as ln f = a + b t; the rate may be negative."""

    lower = (-np.inf, -np.inf)
    upper = (np.inf, np.inf)

    def evaluate(self, theta: np.ndarray, clock: Clock) -> tuple[np.ndarray, list[np.ndarray]]:
        """See `Form.evaluate`."""
        value = clock.decay(-theta[1], -theta[0])
        slopes = [
            np.broadcast_to(1.0, value.shape),
            np.broadcast_to(clock.time, value.shape),
        ]
        return value, slopes

    def starts(
        self, clock: Clock, curve: np.ndarray, weight: np.ndarray | None, log: bool
    ) -> list[np.ndarray]:
        """See `Form.starts`."""
        return [line_of_logarithm(clock, curve, weight, log)]

    def natural(
        self, theta: np.ndarray, scale: np.ndarray, span: float
    ) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
        """See `Form.natural`."""
        initial = np.exp(theta[0]) * scale
        slope = np.zeros((2, 2, scale.size))
        slope[0, 0] = initial
        slope[1, 1] = 1.0 / span
        held = np.zeros(theta.shape, dtype=bool)
        return np.stack([initial, theta[1] / span]), slope, held


class Exponential(Law):
    """E = E0 exp(lambda t), parameters (initial_error, growth_rate).

    Examples
    --------
    >>> law = Exponential("exponential", ("initial_error", "growth_rate"), ExponentialForm())
    >>> law.time_to(np.array([[0.5, 0.1]]), 1.0).round(3)
    array([6.931])
    """

    may_fall = True
    least_growth = 0.0

    def value(self, parameters: np.ndarray, lead: np.ndarray) -> np.ndarray:
        """See `Law.value`."""
        initial, rate = split(parameters, column=True)
        return np.asarray(initial * np.exp(rate * lead))

    def jacobian(self, parameters: np.ndarray, lead: np.ndarray) -> np.ndarray:
        """See `Law.jacobian`."""
        initial, rate = split(parameters, column=True)
        growth = np.exp(rate * lead)
        return np.stack([growth, initial * lead * growth], axis=1)

    def rate_at(self, parameters: np.ndarray, size: np.ndarray) -> np.ndarray:
        """See `Law.rate_at`."""
        return split(parameters)[1] + 0.0 * np.asarray(size, dtype=float)

    def growth_rate(
        self, parameters: np.ndarray, size: np.ndarray | float | None = None
    ) -> np.ndarray:
        """See `Law.growth_rate`; the same at every size."""
        return split(parameters)[1]

    def time_between(
        self, parameters: np.ndarray, small: np.ndarray | float, large: np.ndarray | float
    ) -> np.ndarray:
        """Natural logarithm of large / small, over the rate."""
        rate = split(parameters)[1]
        with np.errstate(divide="ignore", invalid="ignore"):
            return np.asarray(np.log(np.asarray(large) / np.asarray(small)) / rate)

    def saturation(self, parameters: np.ndarray) -> np.ndarray:
        """NaN: this law has none."""
        return np.full(len(split(parameters)[0]), np.nan)


EXPONENTIAL = Exponential("exponential", ("initial_error", "growth_rate"), ExponentialForm())
