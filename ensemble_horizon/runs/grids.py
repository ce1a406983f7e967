"""The horizontal grid of the runs, as the source has it."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass

import numpy as np
import xarray as xr

from ensemble_horizon.runs.decoding import StoredVariable, decoder
from ensemble_horizon.runs.recognition import CELLS, X, Y
from ensemble_horizon.vocabulary import COORDINATE_ATTRIBUTES, LATITUDE, LONGITUDE

RECTILINEAR = "rectilinear"
CURVILINEAR = "curvilinear"
NONE = "none"

# Coordinates closer than this are the same point: float32 degrees differ by less.
_RELATIVE, _ABSOLUTE = 1e-6, 1e-4
_LONG = 20_000


@dataclass(frozen=True, eq=False)
class Grid:
    """The horizontal grid.

    Parameters
    ----------
    kind : str
        "rectilinear" (1-D latitude and longitude are dimensions), "curvilinear" (dimensions y and
        x), "cells" (one dimension, cell) or "none" (a point series).
    dims : tuple of str
        Canonical names, in the order of the source.
    shape : tuple of int
        Sizes of ``dims``.
    coords : dict of str to DataArray
        latitude and longitude, as far as the source has them, and 1-D y and x.
    """

    kind: str
    dims: tuple[str, ...]
    shape: tuple[int, ...]
    coords: Mapping[str, xr.DataArray]

    def same_as(self, other: Grid) -> bool:
        """Whether both grids have the same points in the same order."""
        return self.difference(other) is None

    def difference(self, other: Grid) -> str | None:
        """In words, how ``other`` differs from this grid; None if it does not.

        Examples
        --------
        >>> north = Grid("none", (), (), {})
        >>> print(north.difference(north))
        None
        """
        if self is other:
            return None
        if self.dims != other.dims:
            return f"dimensions {other.dims or '()'} instead of {self.dims or '()'}"
        if self.shape != other.shape:
            return f"{_size(other)} points instead of {_size(self)}"
        for name in self.coords.keys() | other.coords.keys():
            ours, theirs = self.coords.get(name), other.coords.get(name)
            if ours is None or theirs is None:
                return f"{name} is in one of them only"
            a, b = ours.values, theirs.values
            if a.shape != b.shape:
                return f"another shape of {name}"
            if not np.allclose(a, b, rtol=_RELATIVE, atol=_ABSOLUTE, equal_nan=True):
                apart = np.nanmax(np.abs(a - b)) if a.size else 0.0
                return f"{name} that differs by up to {apart:.6g}"
        return None

    def describe(self) -> str:
        """One phrase, such as '361 x 720 points, rectilinear'."""
        return f"{_size(self)} points, {self.kind}" if self.dims else "point series without space"


def _size(grid: Grid) -> str:
    return " x ".join(str(length) for length in grid.shape)


def space_roles(
    dims: tuple[str, ...],
    dim_roles: Mapping[str, str | None],
    places: Mapping[str, StoredVariable],
) -> dict[str, str]:
    """Canonical names of the spatial dimensions among ``dims``.

    Parameters
    ----------
    dims : tuple of str
        Dimensions of a data variable.
    dim_roles : mapping
        Role of each dimension as its own coordinate or name tells.
    places : mapping
        The file's latitude, longitude, y and x variables by role, as far as there are any.
    """
    latitude, longitude = places.get(LATITUDE), places.get(LONGITUDE)
    if latitude is not None and longitude is not None:
        both = (tuple(latitude.dimensions), tuple(longitude.dimensions))
        if both[0] == both[1] and len(both[0]) == 1 and both[0][0] in dims:
            return {both[0][0]: CELLS}
        if len(both[0]) == 2 and set(both[0]) <= set(dims):
            return {both[0][0]: Y, both[0][1]: X}
    known = (LATITUDE, LONGITUDE, Y, X, CELLS)
    return {dim: role for dim in dims if (role := dim_roles.get(dim)) in known and role}


def read_grid(
    dims: tuple[str, ...],
    roles: Mapping[str, str],
    sizes: Mapping[str, int],
    places: Mapping[str, StoredVariable],
    known: Sequence[Grid] = (),
) -> Grid:
    """Read the grid of a variable whose spatial ``dims`` have these ``roles``.

    A grid among ``known`` with the same points is returned instead of a copy. For long
    coordinates (2-D ones, mostly) only the first, middle and last rows are compared: reading all
    of them in every file would cost more than the rest of all headers.
    """
    names = tuple(roles[dim] for dim in dims)
    for grid in known:
        if grid.dims == names and grid.shape == tuple(sizes[dim] for dim in dims):
            telling = {
                role: variable
                for role, variable in places.items()
                if set(variable.dimensions) <= set(dims)
                and (variable.dimensions or role not in (Y, X))
            }
            if telling.keys() == grid.coords.keys() and all(
                _looks_like(variable, grid.coords[role].values)
                for role, variable in telling.items()
            ):
                return grid
    coords: dict[str, xr.DataArray] = {}
    for role, variable in places.items():
        over = tuple(variable.dimensions)
        if not set(over) <= set(dims):
            continue
        if len(over) == 0 and role in (Y, X):
            continue
        values = _values(variable)
        attributes: dict[str, object] = {
            key: variable.getncattr(key)
            for key in ("units", "standard_name", "long_name")
            if key in variable.ncattrs()
        }
        attributes.update(COORDINATE_ATTRIBUTES.get(role, {}))
        coords[role] = xr.DataArray(
            values, dims=tuple(roles[dim] for dim in over), name=role, attrs=attributes
        )
    return Grid(_kind(names), names, tuple(sizes[dim] for dim in dims), coords)


def _kind(names: tuple[str, ...]) -> str:
    if not names:
        return NONE
    if CELLS in names:
        return "cells"
    return CURVILINEAR if Y in names or X in names else RECTILINEAR


def _looks_like(variable: StoredVariable, values: np.ndarray) -> bool:
    if variable.shape != values.shape:
        return False
    keys: list[slice] = [slice(None)]
    if values.size > _LONG:
        rows = len(values)
        thick = max(1, _LONG // 10 * rows // values.size)
        keys = [slice(at, at + thick) for at in (0, rows // 2, rows - thick)]
    return all(
        np.allclose(
            _values(variable, key), values[key] if values.ndim else values,
            rtol=_RELATIVE, atol=_ABSOLUTE, equal_nan=True,
        )
        for key in keys
    )  # fmt: skip


def _values(variable: StoredVariable, key: slice = slice(None)) -> np.ndarray:
    raw = np.asarray(variable[key] if variable.ndim else variable[...])
    attributes = {key: variable.getncattr(key) for key in variable.ncattrs()}
    decode = decoder(raw.dtype, attributes)
    out = np.empty(raw.shape, dtype=np.float64)
    decode.decode(raw, out)
    return out
