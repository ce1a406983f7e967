"""Which fields of an experiment are kept, and at which places."""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property

import numpy as np
import numpy.typing as npt

from ensemble_horizon.checks import require_choice
from ensemble_horizon.errors import ArgumentError
from ensemble_horizon.toys.dynamics import Field, System
from ensemble_horizon.toys.norms import Array
from ensemble_horizon.toys.perturbations.method import require_whole
from ensemble_horizon.toys.systems.channel import EARTH_RADIUS, TwoLayerChannel
from ensemble_horizon.vocabulary import COORDINATE_ATTRIBUTES, LATITUDE, LONGITUDE

Coordinates = dict[str, tuple[str, Array, dict[str, str]]]


@dataclass(frozen=True)
class FieldPlan:
    """Fields by name at the places of the truth's system, whichever version makes them.

    Parameters
    ----------
    system : System
        The truth's.
    names : tuple of str
        Fields to keep, all of them if empty.
    grid : (rows, columns), optional
        For the channel: a latitude-longitude grid of this size instead of the system's own.

    Raises
    ------
    ArgumentError
        If there is no such field, or a grid is asked of a system that has none.

    Examples
    --------
    >>> from ensemble_horizon import toys
    >>> channel = toys.system("two-layer-channel")
    >>> plan = FieldPlan(channel, ("eastward_wind_upper",), (4, 8))
    >>> [field.values.shape for field in plan.fields(channel, channel.default_state()[None])]
    [(1, 4, 8)]
    """

    system: System
    names: tuple[str, ...] = ()
    grid: tuple[int, int] | None = None

    def __post_init__(self) -> None:
        if self.grid is not None:
            if not isinstance(self.system, TwoLayerChannel):
                raise ArgumentError(
                    "grid",
                    expected="a system with fields between its grid points: the channel",
                    found=self.system.name,
                    remedy="leave the grid out",
                )
            for count in self.grid:
                require_whole(count, "grid")
        for name in self.names:
            require_choice(name, self._attributes, "fields")

    @cached_property
    def _attributes(self) -> dict[str, dict[str, str]]:
        """Attributes of all fields of the truth's system by name."""
        found = self.system.fields_of(self.system.default_state())
        return {field.name: field.attributes for field in found}

    def coordinates(self) -> Coordinates:
        """Return the coordinates of the places: name to (dimension, values, attributes)."""
        if self.grid is None or not isinstance(self.system, TwoLayerChannel):
            return self.system.coordinates()
        rows, columns = self.grid
        y = self.system.width * ((np.arange(rows) + 0.5) / rows - 0.5)
        x = self.system.length * np.arange(columns) / columns
        parallel = EARTH_RADIUS * np.cos(np.radians(self.system.latitude))
        north = self.system.latitude + np.degrees(y / EARTH_RADIUS)
        return {
            LATITUDE: (LATITUDE, north, COORDINATE_ATTRIBUTES[LATITUDE]),
            LONGITUDE: (LONGITUDE, np.degrees(x / parallel), COORDINATE_ATTRIBUTES[LONGITUDE]),
        }

    def fields(self, system: System, states: npt.ArrayLike) -> tuple[Field, ...]:
        """Return the kept fields of states (..., N) of ``system``, the truth's or a version's."""
        if isinstance(system, TwoLayerChannel):
            found = self._on_grid(system, states)
        else:
            found = system.fields_of(states)
        if not self.names:
            return found
        by_name = {field.name: field for field in found}
        return tuple(by_name[require_choice(name, by_name, "fields")] for name in self.names)

    def _on_grid(self, system: TwoLayerChannel, states: npt.ArrayLike) -> tuple[Field, ...]:
        # Each truncation has a grid of its own; runs that are compared lie on one.
        places = self.coordinates()
        values = system.evaluate(states, places[LATITUDE][1], places[LONGITUDE][1])
        return tuple(
            Field(name, (LATITUDE, LONGITUDE), array, self._attributes[name])
            for name, array in values.items()
        )
