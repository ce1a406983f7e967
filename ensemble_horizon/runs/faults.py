"""Faults: what is wrong with the files, one record each."""

from __future__ import annotations

from dataclasses import dataclass
from enum import Enum


class Effect(Enum):
    """What a fault means for the member it names."""

    note = "worth knowing, nothing is wrong"
    incomplete = "part of the member is absent"
    wrong = "the member's values cannot be trusted"


# Every kind of fault, with its effect. A table, so that a new check is one line here.
KINDS: dict[str, Effect] = {
    "missing-member": Effect.incomplete,
    "missing-lead": Effect.incomplete,
    "missing-variable": Effect.incomplete,
    "unreadable-file": Effect.incomplete,
    "unreadable-data": Effect.incomplete,
    "unusable-file": Effect.incomplete,
    "unit-difference": Effect.incomplete,
    "grid-difference": Effect.incomplete,
    "calendar-difference": Effect.incomplete,
    "start-differs": Effect.incomplete,
    "missing-cells": Effect.incomplete,
    "implausible-values": Effect.wrong,
    "infinite-values": Effect.wrong,
    "constant-fields": Effect.wrong,
    "constant-everywhere": Effect.note,
    "identical-members": Effect.wrong,
    "duplicate-lead": Effect.wrong,
    "time-mismatch": Effect.wrong,
    "leads-out-of-order": Effect.note,
    "lagged-starts": Effect.note,
    "common-mask": Effect.note,
    "varying-mask": Effect.note,
    "variable-skipped": Effect.note,
    "identical-leads": Effect.note,
}


@dataclass(frozen=True)
class Fault:
    """One thing that is wrong, or worth knowing, about the input.

    Parameters
    ----------
    kind : str
        A key of `KINDS`.
    file, member, start, lead, variable
        Where it was found; None where that does not apply. ``start`` is text in ISO 8601 form
        and ``lead`` is in hours.
    message : str
        One sentence for the reader.

    Examples
    --------
    >>> fault = Fault("missing-lead", message="lead 6 h is absent", member=3, lead=6.0)
    >>> fault.effect.name
    'incomplete'
    """

    kind: str
    file: str | None = None
    member: int | str | None = None
    start: str | None = None
    lead: float | None = None
    message: str = ""
    variable: str | None = None

    def __post_init__(self) -> None:
        if self.kind not in KINDS:
            raise ValueError(f"unknown kind of fault {self.kind!r}")

    @property
    def effect(self) -> Effect:
        """What this fault means for its member."""
        return KINDS[self.kind]

    def line(self) -> str:
        """The fault as one line: where, what, and the file.

        Examples
        --------
        >>> Fault("missing-lead", member=3, message="lacks lead 6 h", file="m3.nc").line()
        'member 3: lacks lead 6 h [m3.nc]'
        """
        where = [] if self.member is None else [f"member {self.member}"]
        if self.start is not None:
            where.append(f"start {self.start}")
        place = ", ".join(where) + ": " if where else ""
        return f"{place}{self.message}" + (f" [{self.file}]" if self.file else "")

    def as_dict(self) -> dict[str, object]:
        """The fault as plain values for JSON, with None left out."""
        values = {
            "kind": self.kind,
            "effect": self.effect.name,
            "file": self.file,
            "member": self.member,
            "start": self.start,
            "lead": self.lead,
            "variable": self.variable,
            "message": self.message,
        }
        return {key: value for key, value in values.items() if value is not None}
