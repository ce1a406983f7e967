"""What was missing or wrong on the way to a comparison: counted, and the first few named."""

from __future__ import annotations

from collections.abc import Iterable, Sequence

from ensemble_horizon.night.comparison.named import Notes
from ensemble_horizon.night.verification.gaps import Gap
from ensemble_horizon.runs import Fault
from ensemble_horizon.runs.faults import Effect

_TOLD = 3


def note_faults(label: str, faults: Iterable[Fault], starts: Sequence[str], notes: Notes) -> None:
    """Note the faults of one version at the common starts, each once.

    Parameters
    ----------
    label : name of the version
    faults : of headers and values; what is worth knowing but not wrong is left out
    starts : the common starts, by label

    Examples
    --------
    >>> notes = Notes()
    >>> note_faults("old", [Fault("missing-lead", member=3, message="lacks 6 h")], [], notes)
    >>> notes.left_out
    ['1 fault in old: member 3: lacks 6 h']
    """
    lines = [
        _line(fault)
        for fault in faults
        if fault.effect is not Effect.note and (fault.start is None or fault.start in set(starts))
    ]
    lines = list(dict.fromkeys(lines))
    if lines:
        more = f"; and {len(lines) - _TOLD} more" if len(lines) > _TOLD else ""
        count = f"{len(lines)} fault{'s' if len(lines) > 1 else ''}"
        notes.left_out.append(f"{count} in {label}: {'; '.join(lines[:_TOLD])}{more}")


def _line(fault: Fault) -> str:
    return f"{fault.variable}, {fault.line()}" if fault.variable else fault.line()


def note_gaps(
    gaps: tuple[Sequence[Gap], Sequence[Gap]], labels: tuple[str, str], notes: Notes
) -> None:
    """Note the valid times that nothing could be held against; once, where both lack the same."""
    texts = [[str(gap) for gap in found] for found in gaps]
    for text in dict.fromkeys(texts[0] + texts[1]):
        own = [label for label, found in zip(labels, texts, strict=True) if text in found]
        whose = "" if len(own) == 2 else f" of {own[0]}"
        notes.left_out.append(f"scores{whose}: {text}")
