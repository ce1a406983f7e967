"""Pairing of two versions: the starts, leads and points that both have."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Generic, TypeVar

import numpy as np
import xarray as xr

from ensemble_horizon.errors import ArgumentError
from ensemble_horizon.serial.starts import in_order, start_names
from ensemble_horizon.vocabulary import LEAD, MEMBER

Labelled = TypeVar("Labelled", xr.DataArray, xr.Dataset)
_LEAD_DECIMALS = 6


@dataclass(frozen=True)
class Pair(Generic[Labelled]):
    """Two versions on their common starts, in order of time.

    Parameters
    ----------
    a, b : on the same starts, leads and points
    only_a, only_b : names of the starts that the other has not
    """

    a: Labelled
    b: Labelled
    only_a: list[str]
    only_b: list[str]

    def attributes(self) -> dict[str, str]:
        """What was left out, for the attributes of a result."""
        return {
            "starts_only_in_a": ", ".join(self.only_a),
            "starts_only_in_b": ", ".join(self.only_b),
        }


def pair(a: Labelled, b: Labelled, dim: str) -> Pair[Labelled]:
    """The starts and leads that both have, the points being the same.

    Raises
    ------
    ArgumentError
        if starts have no labels, stand there twice or are not shared; if leads have other units or
        none is shared; or if other coordinates differ.

    Examples
    --------
    >>> a = xr.DataArray([1.0, 2.0, 3.0], dims="start", coords={"start": [0, 12, 24]})
    >>> b = xr.DataArray([1.0, 2.0, 3.0], dims="start", coords={"start": [12, 24, 36]})
    >>> found = pair(a, b, "start")
    >>> found.a.values.tolist(), found.b.values.tolist(), found.only_a
    ([2.0, 3.0], [1.0, 2.0], ['0'])
    """
    a, b = _labelled(a, dim, "a"), _labelled(b, dim, "b")
    starts = {"a": np.asarray(a[dim].values), "b": np.asarray(b[dim].values)}
    alike = starts["a"].dtype.kind == starts["b"].dtype.kind
    common = np.intersect1d(starts["a"], starts["b"]) if alike else starts["a"][:0]
    if common.size == 0:
        raise ArgumentError(
            "a and b",
            expected="starts that both have",
            found="; ".join(f"{name}: {_range(labels)}" for name, labels in starts.items()),
            remedy="give runs of both versions from the same starts",
        )
    only = [start_names(np.setdiff1d(labels, common)) for labels in starts.values()]
    a, b = a.sel({dim: common}), b.sel({dim: common})
    if LEAD in a.dims and LEAD in b.dims:
        a, b = _common_leads(a, b)
    try:
        # Members are those of each version, as many as it has.
        xr.align(a, b, join="exact", copy=False, exclude={MEMBER})
    except ValueError as error:
        differing = [
            str(name)
            for name in a.indexes
            if name in b.indexes and name != MEMBER and not a.indexes[name].equals(b.indexes[name])
        ]
        raise ArgumentError(
            "a and b",
            expected="the same points, places and criteria",
            found=f"other values of {', '.join(differing) or 'the sizes of dimensions'}",
            remedy="interpolate one to the grid of the other, or select what both have",
        ) from error
    return Pair(a, b, *only)


def _labelled(data: Labelled, dim: str, argument: str) -> Labelled:
    ordered = in_order(data, dim, argument)
    if dim not in ordered.coords:
        raise ArgumentError(
            f"{argument}[{dim!r}]",
            expected="the times of the starts, to pair them by",
            found="a dimension without labels",
            remedy=f"attach them with .assign_coords({dim}=...)",
        )
    return ordered


def _range(labels: np.ndarray) -> str:
    names = start_names(labels)
    return f"{len(names)} starts from {names[0]} to {names[-1]}"


def _common_leads(a: Labelled, b: Labelled) -> tuple[Labelled, Labelled]:
    for name, data in (("a", a), ("b", b)):
        if LEAD not in data.coords:
            raise ArgumentError(
                f"{name}[{LEAD!r}]",
                expected="a lead coordinate",
                found="a dimension without one",
                remedy=f"attach it with .assign_coords({LEAD}=...)",
            )
    units = [str(data[LEAD].attrs.get("units", "1")) for data in (a, b)]
    leads = [np.round(np.asarray(data[LEAD].values, float), _LEAD_DECIMALS) for data in (a, b)]
    common, place_a, place_b = np.intersect1d(leads[0], leads[1], return_indices=True)
    if units[0] != units[1] or common.size == 0:
        raise ArgumentError(
            "a and b",
            expected="leads that both have, in the same units",
            found="; ".join(
                f"{name}: {values.size} leads from {values.min():g} to {values.max():g} {unit}"
                for name, values, unit in zip("ab", leads, units, strict=True)
            ),
            remedy="bring the leads to the same units, or compare other runs",
        )
    a, b = a.isel({LEAD: place_a}), b.isel({LEAD: place_b})
    return a, b.assign_coords({LEAD: a[LEAD]})
