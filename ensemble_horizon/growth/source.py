"""Logistic growth of variance with a source, dV/dt = (a V + S)(1 - V/Vs), V = E^2.

The source S is the model's own error. Dalcher and Kalnay (1987), Tellus (from memory). Everything
here is written as V = (V0 + R w)/(1 + u R w) with w = (exp(k t) - 1)/k, R = a V0 + S, u = 1/Vs and
k = a + S u, the textbook solution in a shape without the 0/0 at a = 0, S = 0 and Vs = infinity.
"""

from __future__ import annotations

import numpy as np

from ensemble_horizon.growth.clock import Clock
from ensemble_horizon.growth.law import Form, Law, split
from ensemble_horizon.growth.starts import scan_logistic, scan_source

SMALLEST = 1e-8
SLOWEST = 1e-3


def early_bend(rate: np.ndarray, time: np.ndarray) -> np.ndarray:
    """Derivative by k of (1 - exp(-k t))/k for k t up to 1e-3, where the closed form cancels."""
    product = rate * time
    series = 0.5 - product / 3.0 + product**2 / 8.0 - product**3 / 30.0
    return np.asarray(-(time**2) * series)


class SourceForm(Form):
    """Fitted in (E0, a, S, u = 1/Vs)."""

    lower = (SMALLEST, 0.0, 0.0, 0.0)
    upper = (np.inf, np.inf, np.inf, np.inf)

    def evaluate(self, theta: np.ndarray, clock: Clock) -> tuple[np.ndarray, list[np.ndarray]]:
        """See `Form.evaluate`."""
        initial, feed, source, level = theta
        number, time = initial.size, clock.time
        start = initial * initial
        ramp = feed * start + source
        rate = feed + source * level
        small = rate < SLOWEST
        inverse = 1.0 / np.where(rate > 0, rate, 1.0)
        drop = clock.decay_minus_one(rate)
        fall = np.add(drop, 1.0, out=clock.room("fall", number))
        drop *= -inverse
        drop[:, rate <= 0] = time
        grown = np.multiply(drop, ramp, out=clock.room("grown", number))
        share = np.multiply(grown, level, out=clock.room("share", number))
        share += fall
        np.reciprocal(share, out=share)
        variance = np.multiply(fall, start, out=clock.room("variance", number))
        variance += grown
        variance *= share
        variance[:, level * start >= 1.0] = np.nan
        # With this factor, derivatives of V are those of ln E.
        share /= variance
        share *= 0.5
        free = np.multiply(variance, -level, out=clock.room("free", number))
        free += 1.0
        slid = np.multiply(time, fall, out=clock.room("slid", number))
        by_rate = np.subtract(slid, drop, out=clock.room("by_rate", number))
        by_rate *= inverse
        if small.any():
            by_rate[:, small] = early_bend(rate[small], time)
        by_rate *= ramp
        by_rate *= free
        slid *= variance - start
        by_rate += slid
        by_rate *= share
        drop *= free
        by_ramp = np.multiply(drop, share, out=drop)
        fall *= share
        fall += feed * by_ramp
        fall *= 2.0 * initial
        grown *= variance
        grown *= share
        by_level = np.subtract(source * by_rate, grown, out=grown)
        by_source = np.add(by_ramp, np.multiply(by_rate, level, out=free), out=free)
        by_feed = np.add(by_rate, np.multiply(by_ramp, start, out=slid), out=slid)
        return np.sqrt(variance, out=variance), [fall, by_feed, by_source, by_level]

    def bend(
        self, theta: np.ndarray, value: np.ndarray, slopes: list[np.ndarray], log: bool
    ) -> np.ndarray:
        """See `Form.bend`.

        f depends on E0 squared except at lead zero, so that for a small E0 the curvature that
        Gauss-Newton leaves out is the greater part.
        """
        slope = slopes[0]
        if log:
            return np.asarray(slope / theta[0] - 2.0 * slope * slope)
        return np.asarray(slope * value * (1.0 / theta[0] - slope))

    def starts(
        self, clock: Clock, curve: np.ndarray, weight: np.ndarray | None, log: bool
    ) -> list[np.ndarray]:
        """See `Form.starts`."""
        level, depth, rate = scan_logistic(clock, curve * curve, weight, log)
        initial = np.sqrt(1.0 / (level + np.exp(depth)))
        plain = np.stack([initial, rate, 1e-3 * rate * initial**2, level])
        return [scan_source(clock, curve, weight, log), plain]

    def natural(
        self, theta: np.ndarray, scale: np.ndarray, span: float
    ) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
        """See `Form.natural`."""
        initial, feed, source, level = theta
        endless = level <= 0
        ceiling = 1.0 / np.sqrt(np.where(endless, 1.0, level))
        held = np.stack([initial <= SMALLEST, feed <= 0, source <= 0, endless])
        slope = np.zeros((4, 4, scale.size))
        slope[0, 0] = scale
        slope[1, 1] = 0.5 / span
        slope[2, 2] = scale**2 / span
        slope[3, 3] = np.where(endless, 0.0, -0.5 * ceiling**3 * scale)
        values = np.stack(
            [
                np.where(held[0], 0.0, initial * scale),
                0.5 * feed / span,
                source * scale**2 / span,
                np.where(endless, np.inf, ceiling * scale),
            ]
        )
        return values, slope, held


class LogisticSource(Law):
    """Logistic growth with a source, parameters (initial_error, growth_rate, source, saturation).

    ``growth_rate`` is a/2, the rate of a small error E without the source; ``source`` is S in
    squared units of the curve per unit of lead; ``saturation`` is the root of Vs.

    Examples
    --------
    Without feedback the variance relaxes to saturation: V = Vs (1 - exp(-S t/Vs)).

    >>> LOGISTIC_SOURCE.value(np.array([[0.0, 0.0, 4.0, 2.0]]), np.array([np.log(2.0)])) ** 2
    array([[2.]])
    """

    def _parts(self, parameters: np.ndarray, lead: np.ndarray) -> tuple[np.ndarray, ...]:
        initial, half, source, ceiling = split(parameters, column=True)
        start, feed, level = initial**2, 2.0 * half, 1.0 / ceiling**2
        rate = feed + source * level
        ramp = feed * start + source
        fall = np.exp(-rate * lead)
        with np.errstate(divide="ignore", invalid="ignore"):
            drop = np.where(rate > 0, -np.expm1(-rate * lead) / rate, 0.0 * rate + lead)
        return initial, feed, source, level, rate, ramp, fall, drop

    def value(self, parameters: np.ndarray, lead: np.ndarray) -> np.ndarray:
        """See `Law.value`."""
        initial, _, _, level, _, ramp, fall, drop = self._parts(parameters, lead)
        variance = (initial**2 * fall + ramp * drop) / (fall + level * ramp * drop)
        return np.asarray(np.sqrt(variance))

    def jacobian(self, parameters: np.ndarray, lead: np.ndarray) -> np.ndarray:
        """See `Law.jacobian`; infinite by E0 nowhere, but undefined where the error is zero."""
        initial, feed, source, level, rate, ramp, fall, drop = self._parts(parameters, lead)
        start = initial**2
        share = 1.0 / (fall + level * ramp * drop)
        variance = (start * fall + ramp * drop) * share
        free = 1.0 - level * variance
        with np.errstate(divide="ignore", invalid="ignore"):
            bend = (lead * fall - drop) / rate
        bend = np.where(rate * lead < SLOWEST, early_bend(rate, lead), bend)
        by_ramp = share * drop * free
        by_rate = share * ((variance - start) * lead * fall + ramp * bend * free)
        by_level = -variance * ramp * drop * share + source * by_rate
        with np.errstate(divide="ignore", invalid="ignore"):
            half = 0.5 / np.sqrt(variance)
            return np.stack(
                [
                    half * 2.0 * initial * (fall * share + feed * by_ramp),
                    half * 2.0 * (start * by_ramp + by_rate),
                    half * (by_ramp + level * by_rate),
                    half * by_level * -2.0 * level**1.5,
                ],
                axis=1,
            )

    def rate_at(self, parameters: np.ndarray, size: np.ndarray) -> np.ndarray:
        """See `Law.rate_at`: (a + S/V)(1 - V/Vs)/2."""
        _, half, source, ceiling = split(parameters)
        variance = np.asarray(size, dtype=float) ** 2
        with np.errstate(divide="ignore", invalid="ignore"):
            feed = np.where(source > 0, source / variance, 0.0 * source)
        return np.asarray((half + 0.5 * feed) * (1.0 - variance / ceiling**2))

    def growth_rate(
        self, parameters: np.ndarray, size: np.ndarray | float | None = None
    ) -> np.ndarray:
        """See `Law.growth_rate`: a/2 for a small error; with the source only at a given size."""
        if size is None:
            return split(parameters)[1]
        return self.rate_at(parameters, np.asarray(size))

    def time_between(
        self, parameters: np.ndarray, small: np.ndarray | float, large: np.ndarray | float
    ) -> np.ndarray:
        """Logarithm of G(large)/G(small) over a + S/Vs, with G = (a V + S)/(1 - V/Vs)."""
        _, half, source, ceiling = split(parameters)
        feed, level = 2.0 * half, 1.0 / ceiling**2
        rate = feed + source * level
        first, last = np.asarray(small, dtype=float) ** 2, np.asarray(large, dtype=float) ** 2
        with np.errstate(divide="ignore", invalid="ignore"):
            # G(large)/G(small) - 1 = k (large - small) / ((a small + S)(1 - u large)).
            gain = (last - first) / ((feed * first + source) * (1.0 - level * last))
            time = np.where(rate > 0, np.log1p(rate * gain) / rate, gain)
        return np.where(level * last >= 1.0, np.inf, time)

    def saturation(self, parameters: np.ndarray) -> np.ndarray:
        """Root of Vs."""
        return split(parameters)[3]


LOGISTIC_SOURCE = LogisticSource(
    "logistic-source", ("initial_error", "growth_rate", "source", "saturation"), SourceForm()
)
