"""The survey's report."""

from __future__ import annotations

from collections.abc import Iterable, Sequence
from dataclasses import dataclass

from ensemble_horizon.runs.faults import Fault
from ensemble_horizon.runs.verdict import NOT_USABLE, USABLE, Label, in_order, name_members


@dataclass(frozen=True)
class SurveyReport:
    """What is there, what is missing, what is suspect, and whether it can be used.

    Parameters
    ----------
    verdict : str
        "usable", "usable_without" or "not_usable".
    faults, notes : tuple of Fault
        What is wrong, and what is only worth knowing.
    drop : tuple of labels
        Members to leave out at every start; pass it to `open_runs`.
    drop_at : tuple of (start text, label)
        Members to leave out at one start only; pass it to `Catalogue.without`.
    missing, missing_at
        Expected members that are not there at any start, and (start text, label) of those absent
        at one start only.
    lost_files : tuple of str
        Files that cannot be used and do not say which member they hold.
    short_starts : tuple of str
        Starts that are left with too few members.
    reasons : tuple of str
        Why the verdict is what it is.
    files, variables, starts, members, leads, grid
        What was found: paths, names, start texts, labels, hours, and the grid in words.
    """

    verdict: str
    faults: tuple[Fault, ...]
    notes: tuple[Fault, ...]
    drop: tuple[Label, ...]
    drop_at: tuple[tuple[str, Label], ...]
    missing: tuple[Label, ...]
    missing_at: tuple[tuple[str, Label], ...]
    lost_files: tuple[str, ...]
    short_starts: tuple[str, ...]
    reasons: tuple[str, ...]
    files: tuple[str, ...]
    variables: tuple[str, ...]
    starts: tuple[str, ...]
    members: tuple[Label, ...]
    leads: tuple[float, ...]
    grid: str

    @property
    def usable(self) -> bool:
        """Whether the runs can be used, with or without some members."""
        return self.verdict != NOT_USABLE

    def summary(self) -> str:
        """The verdict in one line."""
        if self.verdict == USABLE:
            return "usable as is"
        if self.verdict == NOT_USABLE:
            return "not usable"
        parts = []
        if away := in_order({*self.drop, *self.missing}):
            parts.append(f"without {name_members(away)}")
        by_start: dict[str, set[Label]] = {}
        for start, member in (*self.drop_at, *self.missing_at):
            if start not in self.short_starts:
                by_start.setdefault(start, set()).add(member)
        listed = list(by_start.items())
        parts += [f"without {name_members(in_order(m))} at {start}" for start, m in listed[:5]]
        if len(listed) > 5:
            parts.append(f"without members at {len(listed) - 5} more starts")
        if self.short_starts:
            noun = "start" if len(self.short_starts) == 1 else "starts"
            parts.append(f"without the {noun} {', '.join(self.short_starts)}")
        if self.lost_files:
            noun = "file" if len(self.lost_files) == 1 else "files"
            parts.append(f"without the {noun} {', '.join(self.lost_files)}")
        return "usable " + "; ".join(parts)

    def text(self) -> str:
        """The report as plain text."""
        lines = [
            f"Files:     {len(self.files)}",
            f"Variables: {', '.join(self.variables)}",
            f"Starts:    {_span(self.starts)}",
            f"Members:   {len(self.members)} ({', '.join(map(str, self.members))})",
            f"Leads:     {len(self.leads)} ({self.leads[0]:g} to {self.leads[-1]:g} h)"
            if self.leads
            else "Leads:     none",
            f"Grid:      {self.grid}",
            "",
            f"Verdict:   {self.summary()}",
            *(f"           - {reason}" for reason in self.reasons),
        ]
        for title, found in (("Faults", self.faults), ("Notes", self.notes)):
            if found:
                lines += ["", f"{title}:", *(f"  {fault.line()}" for fault in found)]
        return "\n".join(lines) + "\n"

    def as_dict(self) -> dict[str, object]:
        """The report as plain values for JSON."""
        return {
            "verdict": self.verdict,
            "summary": self.summary(),
            "reasons": list(self.reasons),
            "drop": list(self.drop),
            "drop_at": [list(pair) for pair in self.drop_at],
            "missing": list(self.missing),
            "missing_at": [list(pair) for pair in self.missing_at],
            "lost_files": list(self.lost_files),
            "short_starts": list(self.short_starts),
            "files": list(self.files),
            "variables": list(self.variables),
            "starts": list(self.starts),
            "members": list(self.members),
            "leads": list(self.leads),
            "grid": self.grid,
            "faults": [fault.as_dict() for fault in self.faults],
            "notes": [fault.as_dict() for fault in self.notes],
        }


def and_more(faults: int) -> str:
    """How many faults were not listed, in words.

    Examples
    --------
    >>> and_more(0), and_more(1), and_more(5)
    ('', ', and 1 more fault', ', and 5 more faults')
    """
    if faults < 1:
        return ""
    return f", and {faults} more fault" + ("s" if faults > 1 else "")


def name_leads(leads: Iterable[float]) -> str:
    """Leads in words, long lists cut short.

    Examples
    --------
    >>> name_leads([6.0]), name_leads([6.0, 12.0])
    ('lead 6 h', 'leads 6, 12 h')
    """
    texts = [f"{lead:g}" for lead in leads]
    noun = "lead" if len(texts) == 1 else "leads"
    if len(texts) > 8:
        texts = [*texts[:3], "...", texts[-1]]
    return f"{noun} {', '.join(texts)} h"


def _span(starts: Sequence[str]) -> str:
    if len(starts) <= 3:
        return ", ".join(starts)
    return f"{len(starts)} ({starts[0]} to {starts[-1]})"
