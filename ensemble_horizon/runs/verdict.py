"""From faults to a verdict: usable as is, usable without some members, or not usable."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass

from ensemble_horizon.runs.faults import Effect, Fault

USABLE = "usable"
USABLE_WITHOUT = "usable_without"
NOT_USABLE = "not_usable"

Label = int | str

_REASONS = 12


@dataclass(frozen=True)
class Verdict:
    """What to do with the runs; see `SurveyReport` for the fields."""

    verdict: str
    drop: tuple[Label, ...]
    drop_at: tuple[tuple[str, Label], ...]
    missing: tuple[Label, ...]
    missing_at: tuple[tuple[str, Label], ...]
    lost_files: tuple[str, ...]
    short_starts: tuple[str, ...]
    reasons: tuple[str, ...]


def judge(
    faults: Sequence[Fault],
    held: Mapping[str, set[Label]],
    expected: Sequence[Label],
    paths: Sequence[str],
    minimum_members: int,
    incomplete: str,
) -> Verdict:
    """The verdict that follows from the faults.

    Parameters
    ----------
    faults : sequence of Fault
        Without the notes.
    held : mapping of start text to labels
        Members that have any field, by start.
    expected : sequence of labels
        Members that should be there.
    paths : sequence of str
        Files that are in use.
    incomplete : str
        "drop" leaves out every faulty member; "use" leaves out only those whose values cannot be
        trusted, and uses incomplete ones as they are; "stop" accepts no fault.
    """
    out = _left_out(faults, held, incomplete)
    everyone = in_order({label for found in held.values() for label in found})
    drop = tuple(
        label
        for label in everyone
        if all(label in out[start] for start in held if label in held[start])
    )
    drop_at = tuple(
        (start, label) for start in held for label in in_order(out[start]) if label not in drop
    )
    missing = tuple(label for label in in_order(set(expected)) if label not in everyone)
    missing_at = tuple(
        (start, label)
        for start in held
        for label in in_order(set(expected) - held[start])
        if label not in missing
    )
    lost = tuple(
        dict.fromkeys(
            fault.file
            for fault in faults
            if fault.file is not None and fault.member is None and fault.file not in paths
        )
    )
    left = {start: len(held[start] - out[start]) for start in held}
    short = tuple(start for start in held if left[start] < minimum_members)
    reasons = fault_lines(faults)
    verdict = USABLE
    if incomplete == "stop" and faults:
        verdict, reasons = NOT_USABLE, ["a fault stops the job, as asked", *reasons]
    elif len(short) == len(held):
        most = max(left.values(), default=0)
        noun = "member" if most == 1 else "members"
        reason = f"{most} usable {noun}, where at least {minimum_members} are needed"
        verdict, reasons = NOT_USABLE, [reason, *reasons]
    elif drop or drop_at or missing or missing_at or lost or short:
        verdict = USABLE_WITHOUT
    else:
        reasons = []  # what is kept all the same stands among the faults
    return Verdict(
        verdict, drop, drop_at, missing, missing_at, lost, short, tuple(dict.fromkeys(reasons))
    )


def fault_lines(faults: Sequence[Fault]) -> list[str]:
    """The first faults, a line each; members that are not there at all share one."""
    absent = [f for f in faults if f.kind == "missing-member" and f.start is None]
    lines = [fault.line() for fault in faults if len(absent) < 2 or fault not in absent]
    if len(absent) > 1:
        labels = [fault.member for fault in absent if fault.member is not None]
        lines = [f"{name_members(labels)} are missing: no file holds them", *lines]
    lines = list(dict.fromkeys(lines))
    if len(lines) > _REASONS:
        return [*lines[:_REASONS], f"and {len(lines) - _REASONS} more"]
    return lines


def name_members(members: Sequence[Label]) -> str:
    """Members in words.

    Examples
    --------
    >>> name_members([3]), name_members([3, 7]), name_members([1, 2, 5])
    ('member 3', 'members 3 and 7', 'members 1, 2 and 5')
    """
    texts = [str(member) for member in members]
    if len(texts) == 1:
        return f"member {texts[0]}"
    return f"members {', '.join(texts[:-1])} and {texts[-1]}"


def in_order(labels: set[Label]) -> list[Label]:
    """Labels sorted, numbers before text."""
    return sorted(labels, key=lambda label: (isinstance(label, str), label))


def _left_out(
    faults: Sequence[Fault], held: Mapping[str, set[Label]], incomplete: str
) -> dict[str, set[Label]]:
    leave = (Effect.wrong,) if incomplete == "use" else (Effect.wrong, Effect.incomplete)
    out: dict[str, set[Label]] = {start: set() for start in held}
    for fault in faults:
        if fault.member is None or fault.effect not in leave:
            continue
        starts = list(held) if fault.start is None else [fault.start]
        for start in starts:
            if start in held and fault.member in held[start]:
                out[start].add(fault.member)
    return out
