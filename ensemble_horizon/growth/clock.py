"""Lead times of a batch of curves, and powers of a rate over them.

``numpy.exp`` is by far the dearest operation of a fit. Leads come in a few distinct steps, so
``exp(-rate t)`` follows from one exponential per distinct step and one product per lead.
"""

from __future__ import annotations

import numpy as np

from ensemble_horizon.checks import require_increasing
from ensemble_horizon.errors import ArgumentError


class Clock:
    """Lead times divided by the last of them.

    Parameters
    ----------
    lead : array (L,)
        Strictly increasing lead times of at least zero, the last above zero.

    Attributes
    ----------
    span : float
        The last lead time, in the units given.
    time : array (L, 1)
        ``lead / span``.

    Raises
    ------
    ArgumentError
        If the leads do not increase, or start below zero.

    Examples
    --------
    >>> clock = Clock(np.array([0.0, 6.0, 12.0]))
    >>> clock.decay(np.array([1.0, 2.0])).round(3)
    array([[1.   , 1.   ],
           [0.607, 0.368],
           [0.368, 0.135]])
    """

    def __init__(self, lead: np.ndarray) -> None:
        values = require_increasing(lead, "lead")
        if values.size == 0 or values[0] < 0 or values[-1] <= 0:
            raise ArgumentError(
                "lead",
                expected="lead times of at least zero, the last above zero",
                found=f"{values[:1]} to {values[-1:]}",
                remedy="count lead times from the start of the forecast",
            )
        self.span = float(values[-1])
        self.time: np.ndarray = (values / self.span)[:, None]
        steps = np.diff(values) / self.span
        # Equal but for rounding is equal; the mean of such steps is nearest to what was meant.
        _, self.kind, count = np.unique(
            np.round(steps, 12), return_inverse=True, return_counts=True
        )
        self.steps: np.ndarray = np.bincount(self.kind, weights=steps) / count
        self._rooms: dict[str, np.ndarray] = {}
        self.regular = self.steps.size <= max(1, steps.size // 4)

    def room(self, name: str, number: int) -> np.ndarray:
        """Scratch array (L, number), the same memory at every call with that name.

        Fresh arrays of this size cost more in page faults than the sums done in them.
        """
        size = self.time.size * number
        held = self._rooms.get(name)
        if held is None or held.size < size:
            held = self._rooms[name] = np.empty(size)
        return held[:size].reshape(self.time.size, number)

    def decay(self, rate: np.ndarray, depth: np.ndarray | float = 0.0) -> np.ndarray:
        """``exp(-rate t - depth)``, scratch (L, n), for ``rate`` and ``depth`` (n,)."""
        power = self.room("decay", rate.size)
        if not self.regular:
            np.multiply(self.time, -rate, out=power)
            power -= depth
            np.exp(power, out=power)
            return power
        factors = np.exp(-self.steps[:, None] * rate)
        np.exp(-rate * self.time[0, 0] - depth, out=power[0])
        if self.steps.size == 1:
            return self._doubled(power, factors[0])
        for index, kind in enumerate(self.kind):
            np.multiply(power[index], factors[kind], out=power[index + 1])
        return power

    def decay_minus_one(self, rate: np.ndarray) -> np.ndarray:
        """``exp(-rate t) - 1`` without cancellation, scratch (L, n)."""
        power = self.room("decay", rate.size)
        if not self.regular:
            np.multiply(self.time, -rate, out=power)
            np.expm1(power, out=power)
            return power
        below = np.expm1(-self.steps[:, None] * rate)
        factors = 1.0 + below
        np.expm1(-rate * self.time[0, 0], out=power[0])
        if self.steps.size == 1:
            return self._doubled(power, factors[0], below[0])
        for index, kind in enumerate(self.kind):
            np.multiply(power[index], factors[kind], out=power[index + 1])
            power[index + 1] += below[kind]
        return power

    @staticmethod
    def _doubled(
        power: np.ndarray, factor: np.ndarray, below: np.ndarray | None = None
    ) -> np.ndarray:
        """Fill powers (L, n), or powers less one, from the first row: twice as many at a time.

        ``factor`` is the power over one step, ``below`` the same less one.
        """
        done, size = 1, power.shape[0]
        while done < size:
            more = min(done, size - done)
            np.multiply(power[:more], factor, out=power[done : done + more])
            if below is not None:
                power[done : done + more] += below
                below = below * (factor + 1.0)
            done += more
            factor = factor * factor
        return power
