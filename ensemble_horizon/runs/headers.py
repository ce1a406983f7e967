"""What one file says about itself: variables, dimensions, starts, leads, members, grid."""

from __future__ import annotations

import difflib
from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass

import netCDF4
import numpy as np

from ensemble_horizon.errors import InputError
from ensemble_horizon.runs.decoding import StoredVariable
from ensemble_horizon.runs.files import FoundFile
from ensemble_horizon.runs.grids import Grid, read_grid, space_roles
from ensemble_horizon.runs.handles import LOCK, border, open_raw
from ensemble_horizon.runs.levels import refuse_other_level, select_level
from ensemble_horizon.runs.moments import Moments, Wanted, read_moments
from ensemble_horizon.runs.recognition import LEVEL, X, Y, recognise, recognise_name
from ensemble_horizon.runs.sources import Source, storage_of
from ensemble_horizon.runs.times import Ticks
from ensemble_horizon.vocabulary import (
    LATITUDE,
    LEAD,
    LONGITUDE,
    MEMBER,
    STANDARD_NAMES,
    START,
    VALID,
)

_RUN_ROLES = (LEAD, VALID, MEMBER, START)
_PLACES = (LATITUDE, LONGITUDE, Y, X)
_RUN_STANDARD_NAMES = {name for role in _RUN_ROLES for name in STANDARD_NAMES[role]}
_REFERENCES = (
    "coordinates", "bounds", "climatology", "grid_mapping", "cell_measures",
    "ancillary_variables", "formula_terms",
)  # fmt: skip


@dataclass(frozen=True)
class VariableHeader:
    """A data variable as its file describes it."""

    name: str
    units: str
    dtype: np.dtype
    attrs: Mapping[str, object]


@dataclass(frozen=True)
class Layout:
    """Variables of one file that share dimensions; the arrays have the shape of ``run_shape``."""

    source: Source
    variables: tuple[VariableHeader, ...]
    start: Ticks
    lead: Ticks
    member: np.ndarray | None
    grid: Grid
    calendar: str
    mismatch: str | None
    lead_units: str


@dataclass(frozen=True)
class FileHeader:
    """All layouts of one file, its global attributes, and the variables that were asked in vain."""

    file: FoundFile
    layouts: tuple[Layout, ...]
    attrs: Mapping[str, object]
    absent: tuple[str, ...]
    skipped: Mapping[str, str]


def read_header(file: FoundFile, wanted: Wanted, known: Sequence[Grid] = ()) -> FileHeader:
    """Read the header of one file, and close it again.

    Parameters
    ----------
    known : sequence of Grid
        Grids of other files; one of them is used where this file has the same.

    Raises
    ------
    InputError
        If the file cannot be opened, holds none of the variables, or has no reference time.
    """
    with LOCK:
        dataset = open_raw(file.path)
        try:
            with border(file.path, "the header"):
                return HeaderReading(dataset, file, wanted, known).header()
        finally:
            dataset.close()


class HeaderReading:
    """The steps of reading one header, with what they share."""

    def __init__(
        self,
        dataset: netCDF4.Dataset,
        file: FoundFile,
        wanted: Wanted,
        known: Sequence[Grid] = (),
    ) -> None:
        self.known = known
        self.dataset = dataset
        self.file = file
        self.wanted = wanted
        self.variables: dict[str, StoredVariable] = dict(dataset.variables)
        self.attributes = {
            name: {key: variable.getncattr(key) for key in variable.ncattrs()}
            for name, variable in self.variables.items()
        }
        self.sizes = {name: len(dim) for name, dim in dataset.dimensions.items()}
        self.roles = self._coordinate_roles()

    def header(self) -> FileHeader:
        """The whole header."""
        names = self._data_names()
        asked = self.wanted.variables
        chosen = names if asked is None else [name for name in asked if name in self.variables]
        absent = tuple(name for name in asked or () if name not in self.variables)
        if not chosen:
            raise self._no_variable(names)
        groups: dict[tuple[tuple[str, ...], object], list[str]] = {}
        for name in chosen:
            dims = tuple(self.variables[name].dimensions)
            level = self.wanted.level
            key = level.get(name) if isinstance(level, Mapping) else level
            extra = str(self.attributes[name].get("coordinates", ""))
            groups.setdefault((dims, (key, extra)), []).append(name)
        layouts, skipped = self._layouts([(dims, group) for (dims, _), group in groups.items()])
        attrs = {key: self.dataset.getncattr(key) for key in self.dataset.ncattrs()}
        return FileHeader(self.file, layouts, attrs, absent, skipped)

    def _layouts(
        self, groups: Sequence[tuple[tuple[str, ...], list[str]]]
    ) -> tuple[tuple[Layout, ...], dict[str, str]]:
        """Layouts of all groups; variables nobody asked for may have unknown dimensions."""
        layouts, skipped, refusals = [], {}, []
        for dims, group in groups:
            unknown = self._unknown_dimension(dims, group[0])
            if unknown is None:
                layouts.append(self._layout(dims, group))
            else:
                refusals.append(unknown)
                skipped.update(dict.fromkeys(group, unknown.found))
        if refusals and (self.wanted.variables is not None or not layouts):
            raise refusals[0]
        return tuple(layouts), skipped

    def _coordinate_roles(self) -> dict[str, str]:
        """Role of each variable that can be a coordinate."""
        referred, asked = set(self._referred("coordinates")), self.wanted.variables or ()
        roles = {}
        for name, variable in self.variables.items():
            attributes = self.attributes[name]
            role = recognise(name, attributes)
            own = name in variable.dimensions or name in referred or variable.ndim == 0
            flat = variable.ndim <= 2 and (
                role in (LATITUDE, LONGITUDE)
                or str(attributes.get("standard_name")) in _RUN_STANDARD_NAMES
            )
            # A latitude that is asked for is data, the position of a float, and no place.
            data = role in _PLACES and name in asked and name not in variable.dimensions
            if role is not None and (own or flat) and not data:
                roles[name] = role
        return roles

    def _referred(self, *keys: str) -> Iterable[str]:
        for attributes in self.attributes.values():
            for key in keys:
                yield from str(attributes.get(key, "")).replace(":", " ").split()

    def _data_names(self) -> list[str]:
        aside = set(self._referred(*_REFERENCES)) | set(self.roles) | set(self.sizes)
        names = [
            name
            for name, variable in self.variables.items()
            if name not in aside and _is_numeric(variable) and variable.ndim
        ]
        moving = [name for name in names if self._moves(name)]
        return moving or names

    def _moves(self, name: str) -> bool:
        return any(self.dim_role(dim) in _RUN_ROLES for dim in self.variables[name].dimensions)

    @property
    def path(self) -> str:
        """The file's path."""
        return self.file.path

    def require(self, name: str) -> StoredVariable:
        """The variable ``name``, or an `InputError` that lists the others."""
        if name not in self.variables:
            raise self._no_variable(self._data_names())
        return self.variables[name]

    def dim_role(self, dim: str) -> str | None:
        """The role of a dimension: of its own coordinate, of one along it, or of its name."""
        if dim in self.roles:
            return self.roles[dim]
        along = {role for name, role in self.roles.items() if self._span(name) == (dim,)}
        for role in (*_RUN_ROLES, LEVEL):
            if role in along:
                return role
        return recognise_name(dim) if dim not in self.variables else None

    def _span(self, name: str) -> tuple[str, ...]:
        """Dimensions of a coordinate, without the one that runs along the characters of text."""
        variable = self.variables[name]
        dims = tuple(variable.dimensions)
        return dims[:-1] if variable.dtype == "S1" else dims

    def _layout(self, dims: tuple[str, ...], names: Sequence[str]) -> Layout:
        dim_roles = {dim: self.dim_role(dim) for dim in dims}
        places = self.places(dims, names[0])
        space = space_roles(dims, dim_roles, places)
        fixed: list[tuple[int, int]] = []
        run_axes: list[int] = []
        for axis, dim in enumerate(dims):
            if dim in space:
                continue
            if dim_roles[dim] in _RUN_ROLES:
                run_axes.append(axis)
            elif dim_roles[dim] == LEVEL:
                values = self.variables.get(dim)
                fixed.append((axis, select_level(self.file.path, names, dim, self.sizes[dim],
                                                 values, self.wanted.level)))  # fmt: skip
            else:
                fixed.append((axis, 0))
        if LEVEL not in dim_roles.values():
            found = [name for name, role in self.roles.items() if role == LEVEL]
            alone = [self.variables[name] for name in found if not self._span(name)]
            refuse_other_level(self.file.path, names, alone, self.wanted.level)
        # Latitude first, as `grid_points` counts, in whichever order the file holds them.
        space_dims = tuple(sorted(space, key=lambda dim: space[dim] in (LONGITUDE, X)))
        run_dims = tuple(dims[axis] for axis in run_axes)
        lengths = tuple(self.sizes[dim] for dim in run_dims)
        space_axes = tuple(dims.index(dim) for dim in space_dims)
        storage = {name: storage_of(self.variables[name], space_axes) for name in names}
        source = Source(self.file.path, tuple(run_axes), lengths, space_axes, tuple(fixed), storage)
        moments = self._moments(run_dims, names[0])
        grid = read_grid(space_dims, space, self.sizes, places, self.known)
        headers = tuple(self._variable(name) for name in names)
        return Layout(source, headers, moments.start, moments.lead, moments.member, grid,
                      moments.calendar, moments.mismatch, moments.lead_units)  # fmt: skip

    def _moments(self, run_dims: tuple[str, ...], name: str) -> Moments:
        listed = str(self.attributes[name].get("coordinates", "")).split()
        candidates: dict[str, list[str]] = {}
        for coordinate, role in self.roles.items():
            if role in _RUN_ROLES and set(self._span(coordinate)) <= set(run_dims):
                candidates.setdefault(role, []).append(coordinate)
        chosen = {
            role: self.variables[min(found, key=lambda c: (c not in run_dims, c not in listed))]
            for role, found in candidates.items()
        }
        sizes = tuple(self.sizes[dim] for dim in run_dims)
        roles = {dim: self.dim_role(dim) for dim in run_dims}
        return read_moments(self.file, chosen, run_dims, sizes, roles, self.wanted)

    def places(self, dims: tuple[str, ...], name: str) -> dict[str, StoredVariable]:
        """Latitude, longitude, y and x of the variable ``name``, as far as the file has them."""
        listed = str(self.attributes[name].get("coordinates", "")).split()
        found: dict[str, list[str]] = {}
        for coordinate, role in self.roles.items():
            if role in _PLACES and set(self.variables[coordinate].dimensions) <= set(dims):
                found.setdefault(role, []).append(coordinate)
        return {
            role: self.variables[min(names, key=lambda c: (c not in listed, c not in dims))]
            for role, names in found.items()
        }

    def _variable(self, name: str) -> VariableHeader:
        variable, attributes = self.variables[name], self.attributes[name]
        return VariableHeader(name, str(attributes.get("units", "")), variable.dtype, attributes)

    def _no_variable(self, names: list[str]) -> InputError:
        offered = ", ".join(names) or "none"
        wanted = self.wanted.variables
        if not wanted:
            return InputError(
                self.file.path,
                expected="a data variable",
                found=f"only {', '.join(self.variables) or 'an empty file'}",
                remedy="name the variable, or leave this file out",
            )
        near = [
            match
            for name in wanted
            for match in difflib.get_close_matches(name, names, n=2, cutoff=0.4)
        ]
        nearest = " or ".join(dict.fromkeys(near))
        return InputError(
            self.file.path,
            expected=f"the variable {' or '.join(map(repr, wanted))}",
            found=f"the variables {offered}",
            remedy=f"ask for {nearest}, which is nearest" if near else "take one of those named",
        )

    def _unknown_dimension(self, dims: tuple[str, ...], name: str) -> InputError | None:
        """The refusal of a variable with a dimension that nothing tells the meaning of."""
        roles = {dim: self.dim_role(dim) for dim in dims}
        space = space_roles(dims, roles, self.places(dims, name))
        known = (*_RUN_ROLES, LEVEL)
        odd = [d for d in dims if d not in space and roles[d] not in known and self.sizes[d] != 1]
        if not odd:
            return None
        dim = odd[0]
        return InputError(
            self.file.path,
            expected=f"to recognise every dimension of {name!r}",
            found=f"the dimension {dim!r} of size {self.sizes[dim]} without a telling coordinate",
            remedy=f"give {dim!r} a coordinate variable with a CF standard_name, units or axis",
        )


def _is_numeric(variable: StoredVariable) -> bool:
    return isinstance(variable.dtype, np.dtype) and variable.dtype.kind in "iuf"
