"""Planets too close to each other for their own good."""

from __future__ import annotations

from dataclasses import dataclass
from typing import ClassVar

import numpy as np

from ensemble_horizon.errors import ArgumentError
from ensemble_horizon.toys.dynamics import PublishedValue, parameter
from ensemble_horizon.toys.norms import Array
from ensemble_horizon.toys.systems.few_bodies import VOLUMES
from ensemble_horizon.toys.systems.gravity import GravitatingBodies

# Gauss's constant squared: G in au3 day-2 per solar mass.
GRAVITY = 0.01720209895**2
EARTH_IN_SOLAR_MASSES = 3.003e-6
# Turns from one planet to the next, in parts of a circle, so that no two start in line.
GOLDEN_SECTION = (3.0 - np.sqrt(5.0)) / 2.0


@dataclass(frozen=True)
class CompactPlanets(GravitatingBodies):
    """An invented star with planets on near orbits, in three dimensions.

    The planets have equal masses m and semi-major axes a with a fixed ``spacing`` D in mutual Hill
    radii, (2 m / 3 M)^(1/3) (a_k + a_k+1) / 2. Ellipses and planes point every way, turned by the
    golden section from planet to planet. Positions are in au, velocities in au per day; the centre
    of mass rests at the origin.

    As they stand the planets are chaotic but stay together: the leading exponent was measured as
    0.0025 +- 0.0003 per day (95 percent), one over 62 turns of the inner planet, and all of 16
    members kept their planets for 2000 turns. With a fourth planet some members lose one within
    1200 turns; a spacing of 5.5 instead of 5 calms four.

    Spacing in Hill radii: Gladman 1993, Icarus 106; Chambers, Wetherill and Boss 1996, Icarus 119
    (from memory).

    Raises
    ------
    ArgumentError
        If the spacing is so wide that no finite orbit is that far out.

    Examples
    --------
    >>> planets = CompactPlanets()
    >>> planets.periods.round(2).tolist()
    [6.29, 7.92, 9.96]
    """

    planets: int = parameter(3, "1", "number of planets", minimum=1, whole=True)
    star_mass: float = parameter(0.35, "solar masses", "mass of the star", above=0.0)
    planet_mass: float = parameter(5.0, "Earth masses", "mass of each planet", above=0.0)
    inner_axis: float = parameter(0.047, "au", "semi-major axis of the inner planet", above=0.0)
    spacing: float = parameter(5.0, "1", "spacing D in mutual Hill radii", above=0.0)
    eccentricity: float = parameter(0.04, "1", "eccentricity of each orbit", minimum=0.0, below=1.0)
    inclination: float = parameter(
        1.0, "degrees", "inclination of each orbit", minimum=0.0, below=90.0
    )
    softening: float = parameter(0.0, "au", "softening length s", minimum=0.0)

    name: ClassVar[str] = "compact-planets"
    title: ClassVar[str] = "An invented star with close planets that disturb each other"
    source: ClassVar[str] = "Newton 1687, Principia; the planets are invented"
    time_units: ClassVar[str] = "day"
    state_units: ClassVar[str] = "au"
    velocity_units: ClassVar[str] = "au day-1"
    dimensions: ClassVar[int] = 3
    gravity: ClassVar[float] = GRAVITY
    step: ClassVar[float] = 0.25
    published: ClassVar[tuple[PublishedValue, ...]] = (VOLUMES,)

    def __post_init__(self) -> None:
        super().__post_init__()
        if self._hill_factor() >= 1.0:
            raise ArgumentError(
                f"{self.name}: spacing",
                expected=f"below {self.spacing / self._hill_factor():.3g} for these masses",
                found=f"{self.spacing:g}",
                remedy="take a smaller spacing, or planets of less mass",
            )

    @property
    def masses(self) -> tuple[float, ...]:
        """Masses of the star and the planets, in solar masses."""
        planet = self.planet_mass * EARTH_IN_SOLAR_MASSES
        return (float(self.star_mass), *(planet,) * int(self.planets))

    @property
    def axes(self) -> Array:
        """Semi-major axes at the start, innermost first, in au."""
        factor = self._hill_factor()
        ratio = (1.0 + factor) / (1.0 - factor)
        return np.asarray(self.inner_axis * ratio ** np.arange(int(self.planets)))

    @property
    def periods(self) -> Array:
        """Periods of the undisturbed orbits, in days."""
        attraction = GRAVITY * (self.masses[0] + self.masses[1])
        return np.asarray(2.0 * np.pi * np.sqrt(self.axes**3 / attraction))

    def default_state(self) -> Array:
        """Return the planets on their ellipses, a golden section of a turn apart."""
        turn = 2.0 * np.pi * GOLDEN_SECTION * np.arange(int(self.planets))
        e, tilt, node = self.eccentricity, np.radians(self.inclination), 2.0 * turn
        # True anomaly and argument of the pericentre, both measured in the plane of the orbit.
        anomaly, along = 3.0 * turn, turn
        distance = self.axes * (1.0 - e**2) / (1.0 + e * np.cos(anomaly))
        speed = 2.0 * np.pi * self.axes / self.periods / np.sqrt(1.0 - e**2)
        u, v = distance * np.cos(along), distance * np.sin(along)
        towards = along - anomaly
        du = -speed * (np.sin(along) + e * np.sin(towards))
        dv = speed * (np.cos(along) + e * np.cos(towards))
        state = np.zeros((2, 3, int(self.planets) + 1))
        for part, (a, b) in zip(state, ((u, v), (du, dv)), strict=True):
            part[0, 1:] = a * np.cos(node) - b * np.cos(tilt) * np.sin(node)
            part[1, 1:] = a * np.sin(node) + b * np.cos(tilt) * np.cos(node)
            part[2, 1:] = b * np.sin(tilt)
        share = np.array(self.masses) / sum(self.masses)
        return np.asarray((state - (state @ share)[..., None]).ravel())

    def _hill_factor(self) -> float:
        """Return half the distance of neighbours over the mean of their axes."""
        star, planet = self.masses[:2]
        return float(0.5 * self.spacing * (2.0 * planet / (3.0 * star)) ** (1.0 / 3.0))
