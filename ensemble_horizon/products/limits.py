"""Single limits: one record per start, variable, place and criterion."""

from __future__ import annotations

from collections.abc import Iterable, Iterator
from dataclasses import dataclass
from typing import Protocol

import numpy as np
import xarray as xr

from ensemble_horizon.checks import require_dimension
from ensemble_horizon.products.wording import (
    horizon_text,
    iso_start,
    law_names,
    start_text,
)
from ensemble_horizon.vocabulary import CRITERION, LEAD, PLACE, START, Status


class VariableResult(Protocol):
    """What is known of one variable: its curves, and its maps if there are any."""

    @property
    def curves(self) -> xr.Dataset:
        """Curves, fits and horizons of regions and sites."""

    @property
    def maps(self) -> xr.Dataset | None:
        """Horizons and fits per grid point."""


@dataclass(frozen=True)
class Limit:
    """One horizon with all that belongs to it; NaN where there is no number.

    ``low`` and ``high`` are the ends of the interval: ``high`` is infinite where it lies beyond the
    run. ``law`` is "none" where none was fitted, and empty where that is not known. ``index`` is
    the position (start, place, criterion) in the curves it came from. ``rule`` says what the
    criterion asks for, whatever its name, in ``units``; empty where that is not known. ``hold`` is
    how long a crossing must last.
    """

    start: str
    start_text: str
    variable: str
    long_name: str
    place: str
    place_kind: str
    criterion: str
    criterion_kind: str
    threshold: float
    threshold_units: str
    horizon: float
    low: float
    high: float
    horizon_units: str
    status: Status
    projected: float
    last_lead: float
    doubling_time: float
    law: str
    members: int | None
    index: tuple[int, int, int]
    rule: str = ""
    units: str = ""
    hold: float = 0.0

    @property
    def text(self) -> str:
        """The horizon in plain words, with its interval."""
        return horizon_text(
            self.status,
            self.horizon,
            self.low,
            self.high,
            self.projected,
            self.last_lead,
            self.horizon_units,
        )


def limits(results: Iterable[VariableResult]) -> list[Limit]:
    """Return the limits of all variables, in the order start, variable, place, criterion.

    Parameters
    ----------
    results : iterable of objects with ``curves``
        One per variable, in the order of the settings.

    Raises
    ------
    ArgumentError
        If curves lack one of the dimensions start, place, criterion or lead.
    """
    found = [limit for result in results for limit in curve_limits(result.curves)]
    order = sorted({limit.start for limit in found}, key=_pooled_last)
    rank = {start: position for position, start in enumerate(order)}
    return sorted(found, key=lambda limit: rank[limit.start])


def curve_limits(curves: xr.Dataset) -> Iterator[Limit]:
    """Yield the limits of one variable, start by start, place by place."""
    for dimension in (START, PLACE, CRITERION, LEAD):
        require_dimension(curves, dimension, "curves")
    curves = curves.transpose(START, PLACE, CRITERION, LEAD, ...)
    numbers = {
        name: _cube(curves, name) for name in ("threshold", "horizon", "low", "high", "projected")
    }
    status = curves["status"].values
    doubling = _table(curves, "doubling_time")
    laws, members = _laws(curves), _table(curves, "members")
    labels = start_labels(curves)
    kinds = _labels(curves, "place_kind", PLACE)
    criterion_kinds = _labels(curves, "criterion_kind", CRITERION)
    threshold_units = _labels(curves, "threshold_units", CRITERION)
    rules = _labels(curves, "criterion_rule", CRITERION)
    size, hold = str(curves.attrs.get("units", "1")), float(curves.attrs.get("hold", 0.0))
    units = str(curves[LEAD].attrs.get("units", "hours"))
    last_lead = float(curves[LEAD].values[-1])
    name = str(curves.attrs.get("variable", "variable"))
    for position, start in enumerate(curves[START].values):
        for row, place in enumerate(curves[PLACE].values):
            count = members[position, row]
            for column, criterion in enumerate(curves[CRITERION].values):
                index = (position, row, column)
                yield Limit(
                    start=iso_start(start, labels[position]),
                    start_text=start_text(start, labels[position]),
                    variable=name,
                    long_name=str(curves.attrs.get("long_name", name)),
                    place=str(place),
                    place_kind=kinds[row],
                    criterion=str(criterion),
                    criterion_kind=criterion_kinds[column],
                    threshold_units=threshold_units[column],
                    horizon_units=units,
                    status=Status(int(status[index])),
                    last_lead=last_lead,
                    doubling_time=float(doubling[position, row]),
                    law=laws[position][row],
                    members=int(count) if np.isfinite(count) else None,
                    index=index,
                    rule=rules[column],
                    units=size,
                    hold=hold,
                    **{key: float(values[index]) for key, values in numbers.items()},
                )


def lead_axis(data: xr.Dataset) -> tuple[str, float | None]:
    """Return the units of the leads and the last lead, from the coordinate or the attributes."""
    units, last = data.attrs.get("lead_units", "hours"), data.attrs.get("last_lead")
    if LEAD in data.coords:
        units = data[LEAD].attrs.get("units", units)
        last = data[LEAD].values[-1]
    return str(units), None if last is None else float(last)


def start_labels(data: xr.Dataset) -> list[str]:
    """Return the labels of the starts, empty where the dataset carries none."""
    return _labels(data, "start_label", START)


def _labels(data: xr.Dataset, name: str, dimension: str) -> list[str]:
    if name not in data:
        return [""] * data.sizes[dimension]
    return [str(label) for label in data[name].values]


def _cube(curves: xr.Dataset, name: str) -> np.ndarray:
    """Return a variable over (start, place, criterion); NaN where it is not given."""
    return _filled(curves, name, (START, PLACE, CRITERION))


def _table(curves: xr.Dataset, name: str) -> np.ndarray:
    """Return a variable over (start, place); NaN where it is not given."""
    return _filled(curves, name, (START, PLACE))


def _filled(curves: xr.Dataset, name: str, dimensions: tuple[str, ...]) -> np.ndarray:
    whole = xr.DataArray(
        np.full(tuple(curves.sizes[key] for key in dimensions), np.nan), dims=dimensions
    )
    if name not in curves:
        return np.asarray(whole.values)
    values = curves[name].variable.astype(float)
    return np.asarray((xr.DataArray(values) + 0.0).broadcast_like(whole).transpose(*dimensions))


def _laws(curves: xr.Dataset) -> list[list[str]]:
    if "law" not in curves:
        return [[""] * curves.sizes[PLACE]] * curves.sizes[START]
    names = law_names(curves["law"])
    return [
        [names.get(int(value)) or "none" if np.isfinite(value) else "" for value in row]
        for row in _table(curves, "law")
    ]


def _pooled_last(start: str) -> tuple[bool, str]:
    return (not start[:4].isdigit(), start)
