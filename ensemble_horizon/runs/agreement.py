"""What the files must agree on: calendar, grid, units; and that their members can be told apart."""

from __future__ import annotations

from collections import Counter
from collections.abc import Iterable
from dataclasses import replace
from typing import TypeVar

import numpy as np

from ensemble_horizon.errors import InputError
from ensemble_horizon.runs.faults import Fault
from ensemble_horizon.runs.grids import Grid
from ensemble_horizon.runs.headers import Layout
from ensemble_horizon.runs.times import iso_text
from ensemble_horizon.runs.units import same_units

T = TypeVar("T")


def keep_one_calendar(layouts: list[Layout], faults: list[Fault]) -> list[Layout]:
    """Keep the files in the calendar that most of them have; the others become faults."""
    usual = _most_common(layout.calendar for layout in layouts)
    kept = []
    for layout in layouts:
        if layout.calendar == usual:
            kept.append(layout)
        else:
            message = f"calendar {layout.calendar!r}, where the others have {usual!r}"
            faults.append(layout_fault("calendar-difference", layout, message))
    return kept


def keep_one_grid(layouts: list[Layout], faults: list[Fault]) -> tuple[list[Layout], Grid]:
    """Keep the files on the grid that most of them have; the others become faults."""
    grids: list[Grid] = []
    number = []
    for layout in layouts:
        index = next((i for i, grid in enumerate(grids) if grid.same_as(layout.grid)), len(grids))
        if index == len(grids):
            grids.append(layout.grid)
        number.append(index)
    usual = _most_common(number)
    kept = []
    for layout, index in zip(layouts, number, strict=True):
        if index == usual:
            kept.append(layout)
            continue
        names = ", ".join(variable.name for variable in layout.variables)
        message = f"another grid for {names}: {grids[usual].difference(layout.grid)}"
        faults.append(layout_fault("grid-difference", layout, message))
    return kept, grids[usual]


def keep_one_unit(layouts: list[Layout], faults: list[Fault]) -> list[Layout]:
    """Keep, for each variable, the files in the units that most of them have."""
    units: dict[str, list[str]] = {}
    for layout in layouts:
        for variable in layout.variables:
            units.setdefault(variable.name, []).append(variable.units)
    usual = {name: _most_common(found) for name, found in units.items()}
    kept = []
    for layout in layouts:
        same = []
        for variable in layout.variables:
            wanted = usual[variable.name]
            if same_units(variable.units, wanted):
                same.append(variable)
                continue
            found = repr(variable.units) if variable.units else "no units"
            message = f"{variable.name!r} in {found}, where the others have {wanted!r}"
            faults.append(layout_fault("unit-difference", layout, message, variable.name))
        if same:
            kept.append(replace(layout, variables=tuple(same)))
    return kept


def number_members(layouts: list[Layout], lagged: bool) -> list[Layout]:
    """Give the member 0 to files that carry no number anywhere, if no two of them collide.

    In a lagged ensemble they stay without: there the start tells them apart.

    Raises
    ------
    InputError
        If only some files have a number, or two files without one hold the same start and lead.
    """
    bare = [layout for layout in layouts if layout.member is None]
    if not bare:
        return layouts
    if len(bare) < len(layouts):
        raise _no_member(bare[0], f"none in {len(bare)} of the files, but one in the others")
    taken: dict[tuple[str, int, int], str] = {}
    for layout in layouts:
        for start, lead in {*zip(layout.start.flat, layout.lead.flat, strict=True)}:
            for variable in layout.variables:
                key = (variable.name, int(start), int(lead))
                other = taken.setdefault(key, layout.source.path)
                if other != layout.source.path:
                    raise _no_member(layout, f"none, and the same start and lead in {other}")
    if lagged:
        return layouts
    return [
        replace(layout, member=np.zeros(layout.start.shape, dtype=np.int64).astype(object))
        for layout in layouts
    ]


def layout_fault(kind: str, layout: Layout, message: str, variable: str | None = None) -> Fault:
    """A fault of one file, with its member and start where it has one only."""
    starts = np.unique(layout.start)
    labels = set() if layout.member is None else set(layout.member.flat)
    return Fault(
        kind,
        file=layout.source.path,
        member=next(iter(labels)) if len(labels) == 1 else None,
        start=iso_text(int(starts[0]), layout.calendar) if starts.size == 1 else None,
        message=message,
        variable=variable,
    )


def _no_member(layout: Layout, found: str) -> InputError:
    return InputError(
        layout.source.path,
        expected="a member number (realization)",
        found=found,
        remedy='use a template with {member}, such as "runs/member{member:02d}.nc"',
    )


def _most_common(values: Iterable[T]) -> T:
    return Counter(values).most_common(1)[0][0]
