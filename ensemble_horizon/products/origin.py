"""What the fields of a file came from: names, criteria and attributes of a dataset, there and back.

NetCDF names cannot be any text, and one file holds the fields of several variables. So the list of
the criteria of each variable carries, as attributes, all that the names of its fields cannot say.
"""

from __future__ import annotations

from collections.abc import Collection, Iterator, Mapping, Sequence
from dataclasses import dataclass
from typing import Any

import netCDF4
import numpy as np
import xarray as xr

from ensemble_horizon.products.limits import lead_axis
from ensemble_horizon.products.netcdf import put, valid_name
from ensemble_horizon.vocabulary import CRITERION

CRITERION_TEXTS = {
    "criterion_kind": "kind of criterion",
    "threshold_units": "units of its threshold",
    "criterion_rule": "what the criterion asks for",
}
POOLED = "pooled"
_LIST = f"_{CRITERION}_name"
_ABOUT = "about_"


@dataclass(frozen=True)
class Origin:
    """The dataset that the fields with one prefix came from.

    Parameters
    ----------
    prefix : str
        Of the names of its fields in the file.
    attributes : mapping
        Of the dataset; ``variable`` is its name as the settings have it.
    notes : mapping
        Further attributes that the writer of the file left, see `note`.
    coords : mapping
        Labels of the criteria, and what is told of each.
    """

    prefix: str
    attributes: Mapping[str, Any]
    notes: Mapping[str, Any]
    coords: Mapping[str, tuple[str, list[str]]]

    def words(self, name: str) -> list[str]:
        """A note that is a list of names; empty where there is none."""
        return str(self.notes.get(name, "")).split()

    def positions(self, name: str, size: int) -> np.ndarray:
        """Positions along a shared axis at which the dataset has values; all by default."""
        found = self.notes.get(f"{name}_positions")
        return np.arange(size) if found is None else np.atleast_1d(found).astype(int)


def prefix_of(label: str, taken: set[str], fields: Collection[str]) -> str:
    """Return a prefix for the fields of a variable that leads to no name in use.

    Parameters
    ----------
    label : str
        The variable.
    taken : set of str
        Names in use; those that the prefix leads to join them.
    fields : collection of str
        Names of its fields, and of whatever else the prefix is put before.

    Examples
    --------
    >>> taken = set()
    >>> prefix_of("wind spread", taken, ["low"]), prefix_of("wind", taken, ["spread_low"])
    ('wind_spread', 'wind_2')
    """
    endings = [*fields, *CRITERION_TEXTS, CRITERION, f"{CRITERION}_name"]
    endings += [f"{POOLED}_{name}" for name in fields]
    while True:
        prefix = valid_name(label, taken)
        names = {f"{prefix}_{ending}" for ending in endings}
        if not names & taken:
            taken |= {*names, f"{prefix}_{POOLED}"}
            return prefix


def put_criteria(file: netCDF4.Dataset, part: xr.Dataset, prefix: str) -> None:
    """Write the names of the criteria of a variable, and what is told of each and of the dataset.

    Parameters
    ----------
    file : netCDF4.Dataset
    part : xarray.Dataset
        With the dimension criterion.
    prefix : str
    """
    dimension = f"{prefix}_{CRITERION}"
    file.createDimension(dimension, part.sizes[CRITERION])
    labels = np.array([str(label) for label in part[CRITERION].values])
    about = f"criterion for {part.attrs.get('long_name', part.attrs.get('variable', prefix))}"
    units, last = lead_axis(part)
    attributes = {"lead_units": units, "last_lead": last, **part.attrs}
    kept = {
        f"{_ABOUT}{key}": value
        for key, value in attributes.items()
        if isinstance(value, str | int | float | np.number)
    }
    put(file, f"{prefix}{_LIST}", (dimension,), labels, {"long_name": about, **kept})
    for name, text in CRITERION_TEXTS.items():
        if name in part.coords:
            put(file, f"{prefix}_{name}", (dimension,), part[name].values, {"long_name": text})


def note(file: netCDF4.Dataset, prefix: str, name: str, value: str | Sequence[int]) -> None:
    """Leave a note on the dataset behind a prefix: words, or positions along an axis."""
    kept = value if isinstance(value, str) else np.asarray(value, dtype=np.int32)
    file[f"{prefix}{_LIST}"].setncattr(name, kept)


def origins(file: netCDF4.Dataset) -> Iterator[Origin]:
    """Yield what each prefix of a file stands for, in the order of writing.

    Variables of files without such notes are passed over.
    """
    for key, variable in file.variables.items():
        attributes = {name: variable.getncattr(name) for name in variable.ncattrs()}
        if not key.endswith(_LIST) or f"{_ABOUT}variable" not in attributes:
            continue
        prefix = key.removesuffix(_LIST)
        told = {CRITERION: _LIST, **{name: f"_{name}" for name in CRITERION_TEXTS}}
        coords = {
            name: (CRITERION, [str(text) for text in file[f"{prefix}{ending}"][:]])
            for name, ending in told.items()
            if f"{prefix}{ending}" in file.variables
        }
        own = {name: value for name, value in attributes.items() if name.startswith(_ABOUT)}
        yield Origin(
            prefix,
            {name.removeprefix(_ABOUT): value for name, value in own.items()},
            {name: value for name, value in attributes.items() if name not in own},
            coords,
        )
