"""Nights: the limits of one start, and what they were measured by."""

from __future__ import annotations

import math
import re
from collections.abc import Iterable
from dataclasses import dataclass
from typing import Any

import numpy as np
import xarray as xr

from ensemble_horizon.errors import ArgumentError, InputError
from ensemble_horizon.products.limits import Limit, VariableResult, curve_limits, start_labels
from ensemble_horizon.products.wording import is_pooled, iso_start
from ensemble_horizon.vocabulary import LEAD, START, Status

_SAME = 1e-6
# The threshold does not tell the distance of a chance, nor the fraction of a saturation.
_TOLD_BY_RULE = ("chance", "saturation_fraction")
_NAME = re.compile(r"(\d{8})T(\d{2})(\d{2})?(\d{2})?\.nc")
_CHANCE = re.compile(r"chance [0-9.e+-]+ beyond [0-9.e+-]+")


@dataclass(frozen=True)
class Measure:
    """What a limit was measured by; only limits of equal measure are compared.

    Parameters
    ----------
    kind : str
        Kind of the criterion, such as ``tolerance``.
    rule : str
        What it asks for, such as ``chance 0.3 beyond 17``; empty where that is not known. Compared
        where the threshold does not tell all of it: ``chance`` and ``saturation_fraction``.
    threshold : float, in ``threshold_units``
        For a fraction of the saturation it changes from night to night, and is not compared.
    threshold_units, units, lead_units : str
        Of the threshold, the variable and the leads.
    hold, first_lead : float, lead units

    Examples
    --------
    >>> one = Measure("tolerance", "tolerance 2", 2.0, "K", "K", "hours", 0.0, 6.0)
    >>> one.equals(one), one.equals(Measure("tolerance", "", 2.5, "K", "K", "hours", 0.0, 6.0))
    (True, False)
    """

    kind: str
    rule: str
    threshold: float
    threshold_units: str
    units: str
    lead_units: str
    hold: float
    first_lead: float

    def equals(self, other: Measure) -> bool:
        """Whether limits by this and the other measure may be compared.

        A threshold that is not known does not count against it: the limit is not known either.
        """
        same = ("kind", "threshold_units", "units", "lead_units")
        if any(getattr(self, name) != getattr(other, name) for name in same):
            return False
        numbers = ["hold", "first_lead"]
        if self.kind in _TOLD_BY_RULE:
            known = not math.isnan(self.threshold + other.threshold)
            if known and not (self.rule and self.rule == other.rule):
                return False
        if self.kind != "saturation_fraction":
            numbers.append("threshold")
        pairs = [(getattr(self, name), getattr(other, name)) for name in numbers]
        return all(math.isclose(a, b, rel_tol=_SAME) for a, b in pairs if not math.isnan(a + b))


@dataclass(frozen=True)
class NightLimit:
    """One limit of one night; ``horizon`` and ``low`` are NaN where there is no number."""

    variable: str
    place: str
    criterion: str
    horizon: float
    low: float
    high: float
    status: Status
    last_lead: float
    measure: Measure

    @property
    def key(self) -> tuple[str, str, str]:
        """Variable, place and criterion."""
        return self.variable, self.place, self.criterion


@dataclass(frozen=True)
class Night:
    """All limits of one start.

    Parameters
    ----------
    start : numpy.datetime64, to the second, UTC
    limits : tuple of NightLimit
    """

    start: np.datetime64
    limits: tuple[NightLimit, ...]

    @property
    def name(self) -> str:
        """The name of its file."""
        return night_name(self.start)


def night_name(start: np.datetime64) -> str:
    """Return the file name of a night.

    Examples
    --------
    >>> night_name(np.datetime64("2031-02-14T00")), night_name(np.datetime64("2031-02-14T06:30"))
    ('20310214T00.nc', '20310214T0630.nc')
    """
    text = str(np.datetime_as_string(start, unit="s")).replace("-", "").replace(":", "")
    while len(text) > len("20310214T00") and text.endswith("00"):
        text = text[:-2]
    return f"{text}.nc"


def start_of_name(name: str) -> np.datetime64 | None:
    """Return the start that a file name tells, None where it is not the name of a night.

    Examples
    --------
    >>> start_of_name("20310214T0630.nc"), start_of_name("notes.nc")
    (np.datetime64('2031-02-14T06:30:00'), None)
    """
    found = _NAME.fullmatch(name)
    if found is None:
        return None
    day, hour, minute, second = (part or "00" for part in found.groups())
    try:
        start = np.datetime64(f"{day[:4]}-{day[4:6]}-{day[6:]}T{hour}:{minute}:{second}")
    except ValueError:
        return None
    return start if night_name(start) == name else None


def date_of(start: str | np.datetime64) -> np.datetime64:
    """Return a start to the second, from ISO 8601 text (UTC) or a date.

    Raises
    ------
    ArgumentError
        If the text is no date.

    Examples
    --------
    >>> date_of("2031-02-14T06Z")
    np.datetime64('2031-02-14T06:00:00')
    """
    try:
        text = start.strip().removesuffix("Z") if isinstance(start, str) else start
        return np.datetime64(text).astype("datetime64[s]")
    except ValueError:
        raise ArgumentError(
            "start",
            expected="a date such as 2031-02-14T00",
            found=repr(start),
            remedy="write year, month, day and hour as in the example",
        ) from None


def night_of(results: Iterable[VariableResult], start: str | np.datetime64 | None = None) -> Night:
    """Gather the limits of one start.

    Parameters
    ----------
    results : iterable of objects with ``curves``
        One per variable. The dataset tells ``hold`` and ``units`` in its attributes, and what the
        criteria ask for in a coordinate ``criterion_rule``.
    start : ISO 8601 text or datetime64, optional
        Which of several starts.

    Raises
    ------
    ArgumentError
        if no start is named and there are several, or the start is not there.
    InputError
        if the starts are not dates of the standard calendar: an archive is ordered by date and
        time of year. A lagged ensemble is filed under its latest start, from which its leads count.
    """
    parts = [result.curves for result in results]
    starts = {when for part in parts for when in _dates(part).values()}
    wanted = None if start is None else date_of(start)
    if wanted is None and len(starts) == 1:
        (wanted,) = starts
    if wanted is None or wanted not in starts:
        raise ArgumentError(
            "start",
            expected="one of the starts of the results",
            found="none named" if wanted is None else str(wanted),
            remedy=f"name one of {', '.join(map(str, sorted(starts)))}",
        )
    limits: list[NightLimit] = []
    for part in parts:
        for position, when in _dates(part).items():
            if when == wanted:
                limits += _night_limits(part.isel({START: [position]}))
    return Night(wanted, tuple(limits))


def _dates(curves: xr.Dataset) -> dict[int, np.datetime64]:
    """Starts by position, to the second, without the one that stands for all."""
    found = {}
    for position, (start, label) in enumerate(
        zip(curves[START].values, start_labels(curves), strict=True)
    ):
        if is_pooled(start, label):
            continue
        if not isinstance(start, np.datetime64):
            raise InputError(
                f"start {iso_start(start, label)}",
                expected="a date of the standard calendar, by which an archive is ordered",
                found=_kind_of_start(start),
                remedy="estimate these runs without an archive, or give them such dates",
            )
        found[position] = start.astype("datetime64[s]")
    return found


def _kind_of_start(start: Any) -> str:
    calendar = getattr(start, "calendar", None)
    return f"a date of the calendar {calendar}" if calendar else "a number"


def _night_limits(curves: xr.Dataset) -> list[NightLimit]:
    hold, units = float(curves.attrs.get("hold", 0.0)), str(curves.attrs.get("units", "1"))
    first = float(curves[LEAD].values[0])
    found = []
    for limit in curve_limits(curves):
        measure = Measure(
            limit.criterion_kind, _rule(curves, limit), limit.threshold, limit.threshold_units,
            units, limit.horizon_units, hold, first,
        )  # fmt: skip
        numbers = (limit.horizon, limit.low, limit.high)
        name = (limit.variable, limit.place, limit.criterion)
        found.append(NightLimit(*name, *numbers, limit.status, limit.last_lead, measure))
    return found


def _rule(curves: xr.Dataset, limit: Limit) -> str:
    """What a criterion asks for, in the words of its record, as far as the curves tell it."""
    if "criterion_rule" in curves.coords:
        return str(curves["criterion_rule"].values[limit.index[2]])
    if limit.criterion_kind == "saturation_fraction" and "saturation" in curves:
        fraction = limit.threshold / float(curves["saturation"].values[limit.index[:2]])
        return f"saturation fraction {fraction:g}" if math.isfinite(fraction) else ""
    # The distance of a chance is told by its name alone, unless the settings gave it another.
    return limit.criterion if _CHANCE.fullmatch(limit.criterion) else ""
