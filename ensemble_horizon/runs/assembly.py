"""From the headers of many files to one catalogue."""

from __future__ import annotations

from collections.abc import Callable, Hashable, Mapping, Sequence
from contextlib import closing
from dataclasses import replace
from datetime import datetime
from typing import TypeAlias

import cftime
import numpy as np

from ensemble_horizon.errors import ArgumentError, EnsembleHorizonError, InputError
from ensemble_horizon.runs.agreement import (
    keep_one_calendar,
    keep_one_grid,
    keep_one_unit,
    layout_fault,
    number_members,
)
from ensemble_horizon.runs.ahead import Mapper, read_ahead
from ensemble_horizon.runs.catalogue import Catalogue, Table
from ensemble_horizon.runs.faults import Effect, Fault
from ensemble_horizon.runs.files import Files, FoundFile, find_files
from ensemble_horizon.runs.grids import Grid
from ensemble_horizon.runs.headers import FileHeader, Layout, VariableHeader, read_header
from ensemble_horizon.runs.lagged import align_lagged, settle_differing_starts
from ensemble_horizon.runs.levels import Level
from ensemble_horizon.runs.moments import Wanted
from ensemble_horizon.runs.sources import Storage
from ensemble_horizon.runs.times import OUTSIDE, date_ticks, iso_text, to_hours

Start: TypeAlias = str | datetime | np.datetime64 | cftime.datetime


def read_catalogue(
    files: Files,
    *,
    variables: str | Sequence[str] | None = None,
    level: Level = None,
    lagged: bool = False,
    start: Start | None = None,
    strict: bool = False,
    analysis: bool = False,
    progress: Callable[[int, int], None] | None = None,
    mapper: Mapper | None = None,
) -> Catalogue:
    """Read the headers of all files and say where every field lies.

    No data are read. Files that cannot be used become faults of the catalogue.

    Parameters
    ----------
    files : str, path, or iterable of them
        Paths, a glob, or a template such as ``"runs/{start:%Y%m%d%H}/member{member:02d}.nc"``.
    variables : str or sequence of str, optional
        Source names; all data variables by default.
    level : float or mapping of variable to float, optional
        Value of the vertical coordinate, for variables with several levels.
    lagged : bool
        The members come from different starts; see `ensemble_horizon.runs.lagged`.
    start : str or date, optional
        Reference time of all files; goes before a template and before the files' own.
    strict : bool
        Raise for the first file that cannot be used, instead of noting a fault.
    analysis : bool
        The files hold analyses: every valid time is a start with the lead 0 h.
    progress : callable, optional
        Called with the number of headers read and the number of files.
    mapper : callable, optional
        Runs a function over a sequence of tasks in other processes and gives back the results in
        order, as ``map`` does; used where there are many files. Results and errors are the same.

    Raises
    ------
    InputError
        If no file can be used, a variable is in none of them, no reference time can be found, or
        starts differ between members and ``lagged`` is False.

    Examples
    --------
    >>> read_catalogue("no/such/folder/*.nc")
    Traceback (most recent call last):
        ...
    ensemble_horizon.errors.InputError: glob 'no/such/folder/*.nc': expected at least one file \
that matches; found no match, and no folder 'no/such/folder'. Next: correct the glob or the folder.
    """
    names = (variables,) if isinstance(variables, str) else variables
    wanted = Wanted(
        variables=None if names is None else tuple(names),
        level=level,
        start=None if start is None else start_ticks(start),
        analysis=analysis,
    )
    found = find_files(files)
    headers, faults = _read_all(found, wanted, strict, progress, mapper)
    _refuse_absent_variables(headers, wanted)
    attrs = headers[0].attrs
    layouts = [layout for header in headers for layout in header.layouts]
    layouts = keep_one_calendar(layouts, faults)
    layouts, grid = keep_one_grid(layouts, faults)
    layouts = keep_one_unit(layouts, faults)
    serious = [fault for fault in faults if fault.effect is not Effect.note]
    if strict and serious:
        raise _strict_refusal(serious[0])
    layouts = number_members(layouts, lagged)
    if lagged:
        layouts = align_lagged(layouts, faults)
    elif not analysis:
        layouts = settle_differing_starts(layouts, faults)
    return _assemble(layouts, grid, faults, attrs)


def start_ticks(start: Start) -> int:
    """Ticks of a start given as ISO 8601 text or as a date.

    Examples
    --------
    >>> start_ticks("1970-01-02T00:00") / 3.6e9
    24.0
    """
    if isinstance(start, cftime.datetime | datetime):
        return date_ticks(start)
    try:
        return int(np.array(start, dtype="datetime64[us]").astype(np.int64))
    except ValueError:
        raise ArgumentError(
            "start",
            expected="a date such as 2024-01-05T00:00",
            found=repr(start),
            remedy="write year-month-day and, after a T, hour:minute",
        ) from None


def _read_all(
    found: Sequence[FoundFile],
    wanted: Wanted,
    strict: bool,
    progress: Callable[[int, int], None] | None,
    mapper: Mapper | None,
) -> tuple[list[FileHeader], list[Fault]]:
    headers: list[FileHeader] = []
    faults: list[Fault] = []
    errors: list[InputError] = []
    grids: list[Grid] = []
    skipped: dict[str, Fault] = {}
    with closing(read_ahead(found, wanted, grids, mapper)) as ahead:
        for count, (file, early) in enumerate(zip(found, ahead, strict=True), start=1):
            try:
                header = early or read_header(file, wanted, grids)
                headers.append(header)
                grids += [layout.grid for layout in header.layouts if layout.grid not in grids]
                for name, reason in header.skipped.items():
                    message = f"{name!r} is left out: {reason}"
                    skipped.setdefault(name, Fault("variable-skipped", file=file.path,
                                                   variable=name, message=message))  # fmt: skip
            except InputError as error:
                if strict:
                    raise
                errors.append(error)
                faults.append(_fault_of(file, error))
            if progress is not None:
                progress(count, len(found))
    if not headers:
        raise errors[0]
    return headers, [*faults, *skipped.values()]


def _fault_of(file: FoundFile, error: EnsembleHorizonError) -> Fault:
    broken = error.expected.endswith(("NetCDF file", "can be read", "the header"))
    start = None if file.parts.start is None else iso_text(date_ticks(file.parts.start), "standard")
    return Fault(
        "unreadable-file" if broken else "unusable-file",
        file=file.path,
        member=file.parts.member,
        start=start,
        lead=file.parts.lead,
        message=f"expected {error.expected}; found {error.found}",
    )


def _refuse_absent_variables(headers: Sequence[FileHeader], wanted: Wanted) -> None:
    for name in wanted.variables or ():
        if all(name in header.absent for header in headers):
            # Ask one file again for this name alone, for the error that lists what is there.
            read_header(headers[0].file, replace(wanted, variables=(name,)))


def _assemble(
    layouts: Sequence[Layout], grid: Grid, faults: list[Fault], attrs: Mapping[str, object]
) -> Catalogue:
    starts = np.unique(np.concatenate([layout.start.ravel() for layout in layouts]))
    leads = np.unique(np.concatenate([layout.lead.ravel() for layout in layouts]))
    leads = leads[leads != OUTSIDE]
    members = sorted_members({label for layout in layouts for label in _labels(layout).flat})
    number = {label: index for index, label in enumerate(members)}
    names = list(dict.fromkeys(v.name for layout in layouts for v in layout.variables))
    shape = (starts.size, leads.size, len(members))
    tables = {name: Table(np.full(shape, -1, np.int32), np.zeros(shape, np.int32))
              for name in names}  # fmt: skip
    headers: dict[str, VariableHeader] = {}
    calendar = layouts[0].calendar
    for source, layout in enumerate(layouts):
        if layout.mismatch:
            faults.append(layout_fault("time-mismatch", layout, layout.mismatch))
        inside = np.flatnonzero(layout.lead.ravel() != OUTSIDE)
        where = (
            np.searchsorted(starts, layout.start.ravel()[inside]),
            np.searchsorted(leads, layout.lead.ravel()[inside]),
            np.array([number[label] for label in _labels(layout).ravel()[inside]], dtype=np.int64),
        )
        flat = np.ravel_multi_index(where, shape)
        if _out_of_order(where):
            faults.append(layout_fault("leads-out-of-order", layout,
                "the leads are not in increasing order; they are read in order"))  # fmt: skip
        first, index = np.unique(flat, return_index=True)
        for variable in layout.variables:
            table = tables[variable.name]
            free = table.source.ravel()[first] < 0
            doubled = sorted(set(where[1][np.setdiff1d(np.arange(flat.size), index)])
                             | set(where[1][index[~free]]))  # fmt: skip
            faults.extend(_doubled(layout, variable.name, to_hours(leads[doubled])))
            table.source.ravel()[first[free]] = source
            table.position.ravel()[first[free]] = inside[index[free]]
            headers.setdefault(variable.name, variable)
    distinct, table_of = _shared(tables)
    known: dict[Hashable, Mapping[str, Storage]] = {}  # files alike share what they say of it
    sources = tuple(
        replace(item, storage=known.setdefault(tuple(item.storage.items()), item.storage))
        for item in (layout.source for layout in layouts)
    )
    order = tuple(sorted(faults, key=lambda fault: (str(fault.file), fault.kind)))
    return Catalogue(headers, starts, leads, members, grid, order, calendar,
                     sources, distinct, table_of, attrs, layouts[0].lead_units)  # fmt: skip


def sorted_members(labels: set[int | str]) -> tuple[int | str, ...]:
    """Labels in order, all of them text when any is.

    Examples
    --------
    >>> sorted_members({10, 2}), sorted_members({"b", "a"})
    ((2, 10), ('a', 'b'))
    """
    return tuple(sorted(labels, key=lambda label: (isinstance(label, str), label)))


def _labels(layout: Layout) -> np.ndarray:
    assert layout.member is not None
    return layout.member


def _out_of_order(where: tuple[np.ndarray, np.ndarray, np.ndarray]) -> bool:
    start, lead, member = where
    order = np.lexsort((np.arange(lead.size), member, start))
    same = (np.diff(start[order]) == 0) & (np.diff(member[order]) == 0)
    return bool((np.diff(lead[order])[same] < 0).any())


def _doubled(layout: Layout, variable: str, leads: np.ndarray) -> list[Fault]:
    if not leads.size:
        return []
    listed = ", ".join(f"{lead:g}" for lead in leads[:6]) + (", ..." if leads.size > 6 else "")
    message = f"lead {listed} h of {variable!r} is there twice; the first is used"
    fault = layout_fault("duplicate-lead", layout, message, variable)
    return [replace(fault, lead=float(leads[0]))]


def _shared(tables: Mapping[str, Table]) -> tuple[tuple[Table, ...], dict[str, int]]:
    """Keep one table where variables lie side by side in the same files."""
    distinct: list[Table] = []
    table_of = {}
    known: dict[Hashable, int] = {}
    for name, table in tables.items():
        key = (table.source.tobytes(), table.position.tobytes())
        if key not in known:
            known[key] = len(distinct)
            distinct.append(table)
        table_of[name] = known[key]
    return tuple(distinct), table_of


def _strict_refusal(fault: Fault) -> InputError:
    return InputError(
        fault.file or "files",
        expected="files that agree with each other",
        found=fault.message,
        remedy="correct the file, or read without strict",
    )
