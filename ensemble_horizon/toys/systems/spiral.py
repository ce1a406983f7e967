"""The spiral sink: a linear system whose errors only shrink, with exponents known exactly."""

from __future__ import annotations

from dataclasses import dataclass
from typing import ClassVar

import numpy as np
import numpy.typing as npt

from ensemble_horizon.toys.dynamics import PublishedValue, System, Time, parameter
from ensemble_horizon.toys.norms import Array


@dataclass(frozen=True)
class SpiralSink(System):
    """dx/dt = -a x - w y, dy/dt = w x - a y.

    The solution is exp(-a t) times a rotation by w t, so both Lyapunov exponents are -a.

    Examples
    --------
    >>> SpiralSink(decay=0.5, rotation=2.0).tendency([1.0, 0.0]).tolist()
    [-0.5, 2.0]
    """

    decay: float = parameter(0.1, "1", "rate of decay a", minimum=0.0)
    rotation: float = parameter(1.0, "1", "angular velocity w")

    name: ClassVar[str] = "spiral-sink"
    title: ClassVar[str] = "Spiral sink: no chaos, errors die away"
    source: ClassVar[str] = "linear algebra (closed form)"
    step: ClassVar[float] = 0.05
    published: ClassVar[tuple[PublishedValue, ...]] = (
        PublishedValue("exponents", (-0.1, -0.1), 1e-6, "linear algebra (closed form)"),
        PublishedValue("sum_of_exponents", -0.2, 1e-12, "linear algebra (closed form)"),
    )

    @property
    def variables(self) -> tuple[str, ...]:
        """Names of the two variables."""
        return ("x", "y")

    def default_state(self) -> Array:
        """Return the point (1, 0)."""
        return np.array([1.0, 0.0])

    def _matrix(self) -> Array:
        return np.array([[-self.decay, -self.rotation], [self.rotation, -self.decay]])

    def tendency(self, state: npt.ArrayLike, time: Time = 0.0) -> Array:
        """Return dx/dt (..., 2)."""
        return np.asarray(np.asarray(state, dtype=float) @ self._matrix().T)

    def jacobian(self, state: npt.ArrayLike, time: Time = 0.0) -> Array:
        """Return the constant matrix, once per state: (..., 2, 2)."""
        leading = np.shape(state)[:-1]
        return np.broadcast_to(self._matrix(), (*leading, 2, 2)).copy()
