"""Growth curves with the words beside them: place, law, doubling time, limits."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass
from itertools import groupby

import numpy as np
import xarray as xr

from ensemble_horizon.products.curve_panel import Panel, fit_note
from ensemble_horizon.products.limits import Limit, VariableResult, curve_limits
from ensemble_horizon.products.page.curve_plot import (
    CurvePlot,
    colour_of,
    curve_plot,
    letter_of,
)
from ensemble_horizon.products.tables import criterion_text
from ensemble_horizon.products.wording import duration, interval_name, lead_units, number
from ensemble_horizon.vocabulary import CRITERION, LEAD, PLACE, START


@dataclass(frozen=True)
class CriterionKey:
    """A criterion in the key of the curves and below each panel."""

    letter: str
    colour: int
    name: str
    words: str = ""


@dataclass(frozen=True)
class CurveFigure:
    """The panel of one place."""

    number: int
    place: str
    note: str
    plot: CurvePlot
    words: str
    limits: tuple[CriterionKey, ...]


@dataclass(frozen=True)
class CurveGroup:
    """The panels of one variable and their key."""

    variable: str
    long_name: str
    axis: str
    lead_axis: str
    band: str
    key: tuple[CriterionKey, ...]
    with_chance: bool
    figures: tuple[CurveFigure, ...]


def curve_groups(results: tuple[VariableResult, ...]) -> Iterator[CurveGroup]:
    """Yield the growth curves of each variable that has a place and a criterion."""
    number = 0
    for result in results:
        ordered = result.curves.transpose(
            START, PLACE, CRITERION, LEAD, ..., missing_dims="ignore"
        ).compute()
        found = list(curve_limits(ordered))
        if not found:
            continue
        group = _group(ordered, found, number)
        number += len(group.figures)
        yield group


def _group(curves: xr.Dataset, found: list[Limit], number: int) -> CurveGroup:
    with_chance = "chance" in curves and bool(curves["chance"].notnull().any())
    places = [list(limits) for _, limits in groupby(found, key=lambda limit: limit.index[1])]
    first = found[0]
    units = str(curves.attrs.get("units", "1"))
    figures = []
    for position, limits in enumerate(places):
        one = curves.isel({START: 0, PLACE: position})
        plot = curve_plot(one, limits, with_chance=with_chance)
        note = fit_note(Panel(one, limits, 0, with_chance))
        figures.append(
            CurveFigure(
                number + position + 1,
                limits[0].place,
                note,
                plot,
                _words(one, limits, units),
                tuple(_key(place, limit, limit.text) for place, limit in enumerate(limits)),
            )
        )
    return CurveGroup(
        variable=first.variable,
        long_name=first.long_name,
        axis="spread" if units == "1" else f"spread, {units}",
        lead_axis=f"lead, {lead_units(first.horizon_units)}",
        band=interval_name(curves.attrs.get("confidence")),
        key=tuple(_shared_key(place, places) for place in range(len(places[0]))),
        with_chance=with_chance,
        figures=tuple(figures),
    )


def _key(position: int, limit: Limit, words: str = "") -> CriterionKey:
    return CriterionKey(letter_of(position), colour_of(position), criterion_text(limit), words)


def _shared_key(position: int, places: list[list[Limit]]) -> CriterionKey:
    """A threshold is told only where all places share it."""
    limits = [limits[position] for limits in places]
    same = len({limit.threshold for limit in limits}) == 1
    words = criterion_text(limits[0]) if same else limits[0].criterion
    return CriterionKey(letter_of(position), colour_of(position), words)


def _words(curves: xr.Dataset, limits: list[Limit], units: str) -> str:
    """Say in words what the panel shows."""
    spread = np.asarray(curves["spread"].values, dtype=float)
    known = np.flatnonzero(np.isfinite(spread))
    first = limits[0]
    unit = "" if units == "1" else f" {units}"
    parts = []
    if known.size:
        lead = np.asarray(curves[LEAD].values, dtype=float)
        ends = [duration(float(lead[at]), first.horizon_units) for at in (known[0], known[-1])]
        parts.append(
            f"The spread grows from {number(spread[known[0]])}{unit} at {ends[0]} to "
            f"{number(spread[known[-1]])}{unit} at {ends[1]}."
            if spread[known[-1]] > spread[known[0]]
            else f"The spread goes from {number(spread[known[0]])}{unit} at {ends[0]} to "
            f"{number(spread[known[-1]])}{unit} at {ends[1]}."
        )
    else:
        parts.append("No curve: too little known.")
    told = "; ".join(f"{criterion_text(limit)}: {limit.text}" for limit in limits)
    return f"{' '.join(parts)} Limits: {told}."
