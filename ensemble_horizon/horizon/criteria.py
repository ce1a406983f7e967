"""Criteria: what a forecast must meet to be worth acting on.

A criterion is a record that turns what is known of a curve into a threshold. To add one, write a
frozen dataclass with the attributes and methods of `Criterion` and put it into `CRITERIA`.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import ClassVar, Protocol

import numpy as np

from ensemble_horizon.checks import require_fraction, require_positive
from ensemble_horizon.errors import ArgumentError


@dataclass(frozen=True)
class Levels:
    """What criteria may rest on, each a scalar or (N,) in the units of the curve, or None."""

    saturation: np.ndarray | float | None = None
    climatology: np.ndarray | float | None = None


class Criterion(Protocol):
    """What every criterion offers."""

    kind: ClassVar[str]
    on_share: ClassVar[bool]  # judged on the share of members, not on the spread

    @property
    def label(self) -> str:
        """Short name for tables and file names."""
        ...

    def threshold(self, levels: Levels) -> np.ndarray | float:
        """Threshold on the curve; NaN where what it rests on is not known."""
        ...

    def threshold_units(self, units: str) -> str:
        """Units of the threshold, given those of the variable."""
        ...


@dataclass(frozen=True)
class Tolerance:
    """Spread may reach ``value``, in the units of the variable.

    Examples
    --------
    >>> Tolerance(2.5).threshold(Levels())
    2.5
    """

    value: float
    kind: ClassVar[str] = "tolerance"
    on_share: ClassVar[bool] = False

    def __post_init__(self) -> None:
        require_positive(self.value, "tolerance")

    @property
    def label(self) -> str:
        """Short name."""
        return f"tolerance {self.value:g}"

    def threshold(self, levels: Levels) -> float:
        """The tolerance itself."""
        return float(self.value)

    def threshold_units(self, units: str) -> str:
        """Those of the variable."""
        return units


@dataclass(frozen=True)
class SaturationFraction:
    """Spread may reach a fraction of the level at which it saturates under the fitted law."""

    value: float
    kind: ClassVar[str] = "saturation_fraction"
    on_share: ClassVar[bool] = False

    def __post_init__(self) -> None:
        require_fraction(self.value, "saturation_fraction")

    @property
    def label(self) -> str:
        """Short name."""
        return f"saturation fraction {self.value:g}"

    def threshold(self, levels: Levels) -> np.ndarray | float:
        """Fraction times saturation; NaN where the law has none."""
        if levels.saturation is None:
            return float("nan")
        level = np.asarray(levels.saturation, dtype=float)
        return self.value * np.where(np.isfinite(level), level, np.nan)

    def threshold_units(self, units: str) -> str:
        """Those of the variable."""
        return units


@dataclass(frozen=True)
class ClimatologyFraction:
    """Spread may reach a fraction of the climatological standard deviation."""

    value: float
    kind: ClassVar[str] = "climatology_fraction"
    on_share: ClassVar[bool] = False

    def __post_init__(self) -> None:
        require_positive(self.value, "climatology_fraction")

    @property
    def label(self) -> str:
        """Short name."""
        return f"climatology fraction {self.value:g}"

    def threshold(self, levels: Levels) -> np.ndarray | float:
        """Fraction times climatological standard deviation; NaN where that is not known."""
        if levels.climatology is None:
            return float("nan")
        level = np.asarray(levels.climatology, dtype=float)
        return self.value * np.where(level > 0, level, np.nan)

    def threshold_units(self, units: str) -> str:
        """Those of the variable."""
        return units


@dataclass(frozen=True)
class Chance:
    """At most a share ``probability`` of the members may lie beyond a distance from the median.

    Parameters
    ----------
    beyond : float above zero, in the units of the variable
    probability : float between 0 and 1
    """

    beyond: float
    probability: float
    kind: ClassVar[str] = "chance"
    on_share: ClassVar[bool] = True

    def __post_init__(self) -> None:
        require_positive(self.beyond, "chance: beyond")
        require_fraction(self.probability, "chance: probability")

    @property
    def label(self) -> str:
        """Short name."""
        return f"chance {self.probability:g} beyond {self.beyond:g}"

    def threshold(self, levels: Levels) -> float:
        """The probability."""
        return float(self.probability)

    def threshold_units(self, units: str) -> str:
        """A probability has none."""
        return "1"


CRITERIA: dict[
    str, type[Tolerance] | type[SaturationFraction] | type[ClimatologyFraction] | type[Chance]
]
CRITERIA = {cls.kind: cls for cls in (Tolerance, SaturationFraction, ClimatologyFraction, Chance)}


def criterion_from(
    *,
    tolerance: float | None = None,
    saturation_fraction: float | None = None,
    climatology_fraction: float | None = None,
    chance: float | None = None,
    beyond: float | None = None,
) -> Criterion:
    """The one criterion that the arguments name.

    Raises
    ------
    ArgumentError
        unless exactly one is named.
    """
    named = {
        "tolerance": tolerance,
        "saturation_fraction": saturation_fraction,
        "climatology_fraction": climatology_fraction,
        "chance": chance,
    }
    given = [name for name, value in named.items() if value is not None]
    if len(given) != 1:
        raise ArgumentError(
            "criterion",
            expected=f"exactly one of {', '.join(named)}",
            found=", ".join(given) or "none",
            remedy="name one criterion a call",
        )
    if chance is not None:
        return Chance(beyond=1.0 if beyond is None else beyond, probability=chance)
    if tolerance is not None:
        return Tolerance(tolerance)
    if saturation_fraction is not None:
        return SaturationFraction(saturation_fraction)
    assert climatology_fraction is not None
    return ClimatologyFraction(climatology_fraction)
