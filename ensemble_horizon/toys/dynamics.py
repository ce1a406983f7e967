"""The record every toy system is: parameters with units, tendency, Jacobian, published values."""

from __future__ import annotations

from abc import ABC, abstractmethod
from dataclasses import dataclass, field, fields
from typing import Any, ClassVar

import numpy as np
import numpy.typing as npt

from ensemble_horizon.errors import ArgumentError
from ensemble_horizon.toys.norms import Array, Norm, scaled

Time = float | Array

# Hours in one unit of model time; a system without a physical clock has none.
HOURS_PER_TIME_UNIT = {"day": 24.0, "hours": 1.0}


@dataclass(frozen=True)
class Parameter:
    """One parameter of a system: value, units and what it stands for."""

    value: float
    units: str
    meaning: str


@dataclass(frozen=True)
class PublishedValue:
    """A number from the literature that the system must reproduce.

    ``quantity`` is one of ``exponents``, ``leading_exponent``, ``sum_of_exponents``,
    ``positive_exponents``, ``dimension``, ``period`` (of the orbit that is followed, in units of
    model time); it holds for ``parameters`` (others at their default) and to within ``tolerance``
    (same units as the value; exponents are per unit of model time).
    """

    quantity: str
    value: float | tuple[float, ...]
    tolerance: float
    source: str
    parameters: tuple[tuple[str, float], ...] = ()


@dataclass(frozen=True)
class Field:
    """A named array drawn from states: ``values`` has the states' leading axes, then ``dims``."""

    name: str
    dims: tuple[str, ...]
    values: Array
    attributes: dict[str, str]


def parameter(
    default: float,
    units: str,
    meaning: str,
    *,
    above: float | None = None,
    minimum: float | None = None,
    below: float | None = None,
    whole: bool = False,
) -> Any:
    """Declare a parameter of a system: default, units, meaning and the values it accepts.

    ``above`` and ``below`` exclude the bound itself, ``minimum`` includes it; ``whole`` asks for an
    integer.
    """
    metadata = {
        "units": units,
        "meaning": meaning,
        "above": above,
        "minimum": minimum,
        "below": below,
        "whole": whole,
    }
    return field(default=default, metadata=metadata)


@dataclass(frozen=True)
class System(ABC):
    """A system of ordinary differential equations dx/dt = f(x, t) with N variables.

    A subclass is a frozen dataclass whose fields are made with `parameter`. States are arrays
    ``(..., N)``: any number of leading axes (member, start, ...) is worked on at once.

    Attributes
    ----------
    name, title, source : str
        Name in the registry, one line for people, the publication.
    time_units : str
        ``"1"`` for a system without a physical clock, else ``"day"`` or ``"hours"``.
    scheme : str
        Key of `ensemble_horizon.toys.schemes.SCHEMES`.
    step : float
        A time step at which that scheme is accurate, in ``time_units``.
    spin_up : float
        Time from `default_state` after which a run is on the attractor, in ``time_units``.
    published : tuple of PublishedValue
        What the literature states about the system.
    """

    name: ClassVar[str]
    title: ClassVar[str]
    source: ClassVar[str]
    time_units: ClassVar[str] = "1"
    state_units: ClassVar[str] = "1"
    scheme: ClassVar[str] = "runge-kutta"
    step: ClassVar[float]
    spin_up: ClassVar[float] = 0.0
    published: ClassVar[tuple[PublishedValue, ...]] = ()

    def __post_init__(self) -> None:
        for entry in fields(self):
            _check_parameter(self.name, entry.name, getattr(self, entry.name), entry.metadata)

    @property
    def parameters(self) -> dict[str, Parameter]:
        """Parameters by name, with value, units and meaning."""
        return {
            entry.name: Parameter(
                getattr(self, entry.name), entry.metadata["units"], entry.metadata["meaning"]
            )
            for entry in fields(self)
        }

    @property
    @abstractmethod
    def variables(self) -> tuple[str, ...]:
        """Names of the N variables, in the order of the state."""

    @property
    def size(self) -> int:
        """Number of variables N."""
        return len(self.variables)

    @property
    def units_of_variables(self) -> tuple[str, ...]:
        """Units of the N variables; here the same for all, ``state_units``."""
        return (self.state_units,) * self.size

    @property
    def hours_per_time_unit(self) -> float | None:
        """Hours in one unit of model time, or None where time is non-dimensional."""
        return HOURS_PER_TIME_UNIT.get(self.time_units)

    @abstractmethod
    def default_state(self) -> Array:
        """Return a state (N,) from which a run can begin."""

    @abstractmethod
    def tendency(self, state: npt.ArrayLike, time: Time = 0.0) -> Array:
        """Return dx/dt (..., N) of states (..., N), per ``time_units``.

        ``time`` broadcasts against the leading axes; only a system driven from outside uses it.
        """

    @abstractmethod
    def jacobian(self, state: npt.ArrayLike, time: Time = 0.0) -> Array:
        """Return the derivatives of the tendency, (..., N, N), at states (..., N)."""

    def tangent(self, state: npt.ArrayLike, displacement: npt.ArrayLike, time: Time = 0.0) -> Array:
        """Return the Jacobian at ``state`` applied to ``displacement``, both (..., N)."""
        product = self.jacobian(state, time) @ np.asarray(displacement, dtype=float)[..., None]
        return np.asarray(product[..., 0])

    def norms(self) -> dict[str, Norm]:
        """Return the norms in which a displacement of this system may be measured, by name."""
        one = np.ones(self.size)
        mean = one / np.sqrt(self.size)
        return {
            "euclidean": scaled("euclidean", self.state_units, "root of the sum of squares", one),
            "area-weighted": scaled(
                "area-weighted", self.state_units, "root mean square over the variables", mean
            ),
        }

    def coordinates(self) -> dict[str, tuple[str, Array, dict[str, str]]]:
        """Return spatial coordinates of the fields: name to (dimension, values, attributes)."""
        return {}

    def fields_of(self, states: npt.ArrayLike) -> tuple[Field, ...]:
        """Return the named fields of states (..., N); here one series per variable."""
        values = np.asarray(states, dtype=float)
        labels = zip(self.variables, self.units_of_variables, strict=True)
        return tuple(
            Field(name, (), values[..., index], {"units": units, "long_name": name})
            for index, (name, units) in enumerate(labels)
        )

    def covariance(self, length: float) -> Array:
        """Return the covariance (N, N) of random fields of the length scale ``length``.

        The fields have the correlation exp(-r^2 / (2 L^2)) at the distance r; ``length`` L is in
        the units in which the system measures distance. A system without space refuses.

        Raises
        ------
        ArgumentError
            If the variables have no places, or the length does not suit the system.
        """
        raise ArgumentError(
            f"fields of {self.name}",
            expected="a system whose variables have places in space",
            found=f"{self.size} variables without",
            remedy="take method='gaussian', with scale= if the variables differ in size",
        )

    def carried_over(self, states: npt.ArrayLike, other: System) -> Array:
        """Return ``states`` (..., N) of this system as states (..., other.size) of ``other``.

        So a run of one system can be started from, or held against, a run of its relative: with
        other parameters, at another resolution. Here ``other`` must have the same variables.

        Raises
        ------
        ArgumentError
            If the variables of one system do not stand for those of the other.

        Examples
        --------
        >>> from ensemble_horizon.toys.systems.lorenz import Lorenz63
        >>> Lorenz63().carried_over([1.0, 2.0, 3.0], Lorenz63(rho=30.0)).tolist()
        [1.0, 2.0, 3.0]
        """
        array = require_states(self, states, "states")
        if type(other) is not type(self) or other.variables != self.variables:
            raise ArgumentError(
                "other",
                expected=f"a system that takes over the {self.size} variables of {self.name}",
                found=f"{other.name} with {other.size} variables of its own",
                remedy=f"take a {self.name} system that differs only in its constants",
            )
        return array.copy()


def require_states(system: System, states: npt.ArrayLike, argument: str) -> Array:
    """Return ``states`` as floats if the last axis holds the variables of ``system``."""
    array = np.asarray(states, dtype=float)
    if array.ndim < 1 or array.shape[-1] != system.size:
        raise ArgumentError(
            argument,
            expected=f"an array whose last axis holds the {system.size} variables of {system.name}",
            found=f"shape {array.shape}",
            remedy="begin with system.default_state()",
        )
    if not np.all(np.isfinite(array)):
        raise ArgumentError(
            argument,
            expected="finite numbers",
            found=f"{int(np.count_nonzero(~np.isfinite(array)))} that are not",
            remedy="drop the members concerned",
        )
    return array


def _check_parameter(system: str, name: str, value: Any, rules: Any) -> None:
    """Raise `ArgumentError` unless ``value`` keeps the rules its declaration states."""
    number = not isinstance(value, bool) and isinstance(value, int | float | np.number)
    if rules["whole"]:
        expected, fits = "a whole number", number and float(value).is_integer()
    else:
        expected, fits = "a finite number", number and bool(np.isfinite(value))
    bounds = []
    if rules["above"] is not None:
        bounds.append(f"above {rules['above']:g}")
        fits = fits and value > rules["above"]
    if rules["minimum"] is not None:
        bounds.append(f"of at least {rules['minimum']:g}")
        fits = fits and value >= rules["minimum"]
    if rules["below"] is not None:
        bounds.append(f"below {rules['below']:g}")
        fits = fits and value < rules["below"]
    expected = f"{expected} {' and '.join(bounds)}".rstrip()
    if not fits:
        raise ArgumentError(
            f"{system}: {name}",
            expected=f"{expected} ({rules['meaning']}, units {rules['units']})",
            found=repr(value),
            remedy="correct the parameter or leave it out",
        )
