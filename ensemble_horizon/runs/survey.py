"""The survey: what is there, what is missing, what is suspect."""

from __future__ import annotations

from collections.abc import Callable, Iterator, Mapping, Sequence

import numpy as np

from ensemble_horizon.checks import require_choice
from ensemble_horizon.errors import ArgumentError
from ensemble_horizon.runs.assembly import Start, read_catalogue
from ensemble_horizon.runs.catalogue import Catalogue
from ensemble_horizon.runs.content import read_content
from ensemble_horizon.runs.faults import Effect, Fault
from ensemble_horizon.runs.files import Files
from ensemble_horizon.runs.levels import Level
from ensemble_horizon.runs.report import SurveyReport, name_leads
from ensemble_horizon.runs.suspects import suspects
from ensemble_horizon.runs.verdict import in_order, judge

POLICIES = ("drop", "use", "stop")


def survey_runs(
    files: Files | Catalogue,
    *,
    variables: str | Sequence[str] | None = None,
    expected_members: int | Sequence[int | str] | None = None,
    expected_leads: Sequence[float] | None = None,
    plausible: Mapping[str, tuple[float, float]] | None = None,
    minimum_members: int = 2,
    incomplete: str = "drop",
    level: Level = None,
    lagged: bool = False,
    start: Start | None = None,
    content: bool = True,
    progress: Callable[[int, int], None] | None = None,
) -> SurveyReport:
    """Survey the runs before they are used.

    Parameters
    ----------
    files, variables, level, lagged, start
        As for `ensemble_horizon.runs.read_catalogue`; a `Catalogue` is taken as it is.
    expected_members : int or sequence of labels, optional
        Which members should be there. A number stands for 0 to n - 1, or 1 to n where the
        numbers found begin at 1 and the last of them is there.
    expected_leads : sequence of float, optional
        Leads in hours that should be there; by default those that at least half of the members
        of a start have.
    plausible : mapping of variable to (lowest, highest), optional
        In the units of the file.
    minimum_members : int
        Fewer than this are not usable.
    incomplete : str
        What a faulty member leads to: "drop" leaves it out; "use" keeps an incomplete member
        and leaves out only one whose values cannot be trusted; "stop" makes the runs not usable.
    content : bool
        Read all values (each once). False looks at the headers only.
    progress : callable, optional
        Called with the number of fields done and their total.

    Raises
    ------
    InputError
        If nothing at all can be read; see `ensemble_horizon.runs.read_catalogue`.
    ArgumentError
        If ``incomplete`` is none of the three, or ``plausible`` names no pair of rising numbers.
    """
    require_choice(incomplete, POLICIES, "incomplete")
    ranges = dict(plausible or {})
    for name, pair in ranges.items():
        if len(pair) != 2 or not pair[0] < pair[1]:
            raise ArgumentError(
                f"plausible[{name!r}]",
                expected="the lowest and the highest plausible value",
                found=repr(pair),
                remedy="give two rising numbers in the units of the file",
            )
    if isinstance(files, Catalogue):
        catalogue = files
    else:
        catalogue = read_catalogue(
            files, variables=variables, level=level, lagged=lagged, start=start
        )
    found = list(catalogue.faults)
    expected = _expected(catalogue, expected_members)
    found += _absent(catalogue, expected, expected_leads)
    if content:
        found += _of_content(catalogue, ranges, progress)
    faults = tuple(fault for fault in found if fault.effect is not Effect.note)
    notes = tuple(fault for fault in found if fault.effect is Effect.note)
    starts = tuple(catalogue.start_label(index) for index in range(len(catalogue.starts)))
    verdict = judge(
        faults, _held(catalogue, starts), expected, catalogue.paths, minimum_members, incomplete
    )
    return SurveyReport(
        verdict=verdict.verdict,
        faults=faults,
        notes=notes,
        drop=verdict.drop,
        drop_at=verdict.drop_at,
        missing=verdict.missing,
        missing_at=verdict.missing_at,
        lost_files=verdict.lost_files,
        short_starts=verdict.short_starts,
        reasons=verdict.reasons,
        files=catalogue.paths,
        variables=tuple(catalogue.variables),
        starts=starts,
        members=catalogue.members,
        leads=tuple(float(lead) for lead in catalogue.leads),
        grid=catalogue.grid.describe(),
    )


def _expected(
    catalogue: Catalogue, expected: int | Sequence[int | str] | None
) -> tuple[int | str, ...]:
    if isinstance(expected, int):
        numbers = [label for label in catalogue.members if isinstance(label, int)]
        from_one = bool(numbers) and min(numbers) >= 1 and max(numbers) == expected
        first = 1 if from_one else 0
        return tuple(range(first, first + expected))
    if expected is not None:
        return tuple(expected)
    # A file that cannot be used still tells by its name which member should be there.
    named = {fault.member for fault in catalogue.faults if fault.member is not None}
    return tuple(in_order({*catalogue.members, *named}))


def _held(catalogue: Catalogue, starts: Sequence[str]) -> dict[str, set[int | str]]:
    any_field = np.zeros((len(starts), len(catalogue.members)), dtype=bool)
    for name in catalogue.variables:
        any_field |= catalogue.present(name).any(axis=1)
    return {
        start: {label for label, is_there in zip(catalogue.members, row, strict=True) if is_there}
        for start, row in zip(starts, any_field, strict=True)
    }


def _absent(
    catalogue: Catalogue,
    expected: Sequence[int | str],
    expected_leads: Sequence[float] | None,
) -> Iterator[Fault]:
    """Members, variables and leads that are not there."""
    explained = {(fault.member, fault.start) for fault in catalogue.faults}
    explained |= {(member, None) for member, _ in explained}
    starts = [catalogue.start_label(index) for index in range(len(catalogue.starts))]
    held = _held(catalogue, starts)
    anywhere = set().union(*held.values())
    for label in expected:
        if label not in anywhere:
            if (label, None) not in explained:
                yield Fault("missing-member", member=label, message="no file holds it")
            continue
        for start in starts:
            if label not in held[start] and (label, start) not in explained:
                yield Fault("missing-member", member=label, start=start,
                            message="no file holds it at this start")  # fmt: skip
    for name in catalogue.variables:
        for index, start in enumerate(starts):
            yield from _absent_leads(catalogue, name, index, held[start], expected_leads)
    for lead in expected_leads or ():
        if not np.isclose(catalogue.leads, lead).any():
            yield Fault("missing-lead", lead=float(lead), message=f"no member has lead {lead:g} h")


def _absent_leads(
    catalogue: Catalogue,
    name: str,
    start: int,
    held: set[int | str],
    expected_leads: Sequence[float] | None,
) -> Iterator[Fault]:
    present = catalogue.present(name)[start]
    here = present.any(axis=0)
    if expected_leads is None:
        wanted = 2 * present.sum(axis=1) >= max(1, int(here.sum()))
    else:
        wanted = np.isclose(catalogue.leads[:, None], np.asarray(expected_leads)).any(axis=1)
    for index, label in enumerate(catalogue.members):
        if not here[index]:
            if label in held:
                yield Fault("missing-variable", member=label, start=catalogue.start_label(start),
                            variable=name, message=f"{name!r} is absent")  # fmt: skip
            continue
        gone = catalogue.leads[wanted & ~present[:, index]]
        if gone.size:
            yield Fault(
                "missing-lead",
                file=catalogue.file_of_member(name, start, index),
                member=label,
                start=catalogue.start_label(start),
                lead=float(gone[0]),
                variable=name,
                message=f"{name!r} lacks {name_leads(gone)}",
            )


def _of_content(
    catalogue: Catalogue,
    plausible: Mapping[str, tuple[float, float]],
    progress: Callable[[int, int], None] | None,
) -> Iterator[Fault]:
    total = sum(int(catalogue.present(name).sum()) for name in catalogue.variables)
    done = 0

    def advance(fields: int) -> None:
        nonlocal done
        done += fields
        if progress is not None:
            progress(done, total)

    for name in catalogue.variables:
        for start in range(len(catalogue.starts)):
            pair = plausible.get(name)
            content = read_content(catalogue, name, start, pair, advance)
            yield from suspects(catalogue, content, pair)
