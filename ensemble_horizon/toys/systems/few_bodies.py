"""Two and three bodies whose orbits close: no chaos, but errors that grow all the same."""

from __future__ import annotations

from dataclasses import dataclass
from typing import ClassVar

import numpy as np

from ensemble_horizon.toys.dynamics import PublishedValue, parameter
from ensemble_horizon.toys.norms import Array
from ensemble_horizon.toys.systems.gravity import GravitatingBodies

VOLUMES = PublishedValue("sum_of_exponents", 0.0, 1e-12, "forces from a potential (closed form)")


@dataclass(frozen=True)
class TwoBody(GravitatingBodies):
    """Two bodies on ellipses about their centre of mass, in the plane.

    Natural units: G = 1, the masses add to 1, and the semi-major axis of the relative orbit is 1,
    so the period is 2 pi. A run starts where the bodies are closest. Neighbouring orbits have
    slightly different periods, so an error grows along the orbit in proportion to time: the spread
    has no doubling time, and all exponents are 0. With softening the ellipses turn.

    Source: Kepler 1609, Newton 1687.

    Examples
    --------
    >>> pair = TwoBody(eccentricity=0.5, share=0.5)
    >>> pair.variables
    ('x1', 'x2', 'y1', 'y2', 'vx1', 'vx2', 'vy1', 'vy2')
    >>> pair.default_state()[:4].tolist(), float(pair.energy(pair.default_state()).round(12))
    ([-0.25, 0.25, 0.0, 0.0], -0.125)
    """

    eccentricity: float = parameter(
        0.3, "1", "eccentricity of the ellipses", minimum=0.0, below=1.0
    )
    share: float = parameter(
        0.25, "1", "share of the second body in the mass", above=0.0, below=1.0
    )
    softening: float = parameter(0.0, "1", "softening length s", minimum=0.0)

    name: ClassVar[str] = "two-body"
    title: ClassVar[str] = "Two bodies on Kepler's ellipses: errors grow, but only with time itself"
    source: ClassVar[str] = "Kepler 1609, Astronomia nova; Newton 1687, Principia"
    dimensions: ClassVar[int] = 2
    step: ClassVar[float] = 2.0 * np.pi / 80.0
    published: ClassVar[tuple[PublishedValue, ...]] = (
        # Linear growth over a time t looks like an exponent of ln(t) / t: hence the tolerance.
        PublishedValue("exponents", (0.0,) * 8, 0.05, "every orbit is closed (mechanics)"),
        VOLUMES,
        PublishedValue("period", 2.0 * np.pi, 1e-6, "Kepler's third law (closed form)"),
    )

    @property
    def masses(self) -> tuple[float, ...]:
        """Masses of the two bodies, with the sum 1."""
        return 1.0 - self.share, self.share

    def default_state(self) -> Array:
        """Return both bodies at their closest, on the x axis."""
        apart = 1.0 - self.eccentricity
        speed = np.sqrt((1.0 + self.eccentricity) / apart)
        of_bodies = np.array([-self.share, 1.0 - self.share])
        still = np.zeros(2)
        return np.concatenate([apart * of_bodies, still, still, speed * of_bodies])


@dataclass(frozen=True)
class FigureEight(GravitatingBodies):
    """Three equal bodies that chase each other along one figure eight, in the plane.

    Natural units: G = 1, all masses 1. The orbit is stable: small errors stay small for long.
    Errors of a few hundredths send the bodies apart.

    Examples
    --------
    >>> eight = FigureEight()
    >>> float(eight.energy(eight.default_state()).round(4))
    -1.2871
    """

    softening: float = parameter(0.0, "1", "softening length s", minimum=0.0)

    name: ClassVar[str] = "figure-eight"
    title: ClassVar[str] = "Three equal bodies on one figure eight, a closed orbit"
    source: ClassVar[str] = "Chenciner and Montgomery 2000, Annals of Math. 152 (from memory)"
    dimensions: ClassVar[int] = 2
    step: ClassVar[float] = 0.05
    published: ClassVar[tuple[PublishedValue, ...]] = (
        VOLUMES,
        PublishedValue("period", 6.3259, 5e-5, f"{source}, initial values by C. Simo"),
    )

    @property
    def masses(self) -> tuple[float, ...]:
        """Masses of the three bodies, all 1."""
        return 1.0, 1.0, 1.0

    def default_state(self) -> Array:
        """Return the published initial values: the third body in the middle of the eight."""
        first, third = (0.97000436, -0.24308753), (-0.93240737, -0.86473146)
        positions = [part for x in first for part in (x, -x, 0.0)]
        velocities = [part for v in third for part in (-v / 2.0, -v / 2.0, v)]
        return np.array(positions + velocities)
