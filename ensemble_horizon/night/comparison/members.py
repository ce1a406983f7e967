"""Members of two versions: how many, and which count in one version only."""

from __future__ import annotations

from collections.abc import Sequence

from ensemble_horizon.night.comparison.named import Notes
from ensemble_horizon.night.input import Input
from ensemble_horizon.runs import Fault
from ensemble_horizon.runs.faults import Effect
from ensemble_horizon.runs.verdict import in_order, name_members
from ensemble_horizon.settings import Settings

_TOLD = 4  # starts named one by one


def note_sizes(found: tuple[Input, Input], labels: tuple[str, str], notes: Notes) -> None:
    """Tell where the versions have ensembles of different sizes, or lack a member throughout."""
    a, b = (item.catalogue.members for item in found)
    if len(a) != len(b):
        notes.cautions.append(
            f"{labels[0]} has {len(a)} members and {labels[1]} {len(b)}: the spread of fewer "
            "members is noisier and passes a threshold a little earlier for that alone"
        )
    for own, other, label in ((found[0], b, labels[0]), (found[1], a, labels[1])):
        out = [member for member in own.report.drop if member in other]
        if out:
            notes.cautions.append(
                f"{name_members(out)}: left out of {label} at every start, used in the other"
            )


def members_used(
    settings: Settings, found: Input, sources: Sequence[str], faults: Sequence[Fault]
) -> dict[str, set[int | str]]:
    """Members of one variable that count at each start.

    Parameters
    ----------
    settings : Settings, which say what is left out
    found : Input
    sources : names of the variable in the files
    faults : what reading the values brought to light, headers aside
    """
    catalogue = found.catalogue
    used: dict[str, set[int | str]] = {}
    for number in range(catalogue.starts.size):
        there = [catalogue.present(name)[number].any(axis=0) for name in sources]
        used[catalogue.start_label(number)] = {
            member
            for position, member in enumerate(catalogue.members)
            if all(part[position] for part in there)
        }
    drop = settings.runs.incomplete == "drop"
    serious = (Effect.wrong, Effect.incomplete) if drop else (Effect.wrong,)
    for fault in faults:
        if fault.effect in serious and fault.start in used and fault.member is not None:
            used[fault.start].discard(fault.member)
    return used


def note_members(
    name: str,
    used: tuple[dict[str, set[int | str]], dict[str, set[int | str]]],
    labels: tuple[str, str],
    notes: Notes,
) -> None:
    """Tell which members count in one version and not in the other at a start.

    Members that one version has nowhere are told by `note_sizes`.
    """
    anywhere = [set().union(*item.values()) for item in used]
    shared = anywhere[0] & anywhere[1]
    told: list[str] = []
    apart = 0
    for start, here in used[0].items():
        there = used[1].get(start, set())
        lines = [
            f"{start}: {name_members(in_order(only))} only in {label}"
            for only, label in (
                ((here - there) & shared, labels[0]), ((there - here) & shared, labels[1]),
            )
            if only
        ]  # fmt: skip
        apart += bool(lines)
        told += lines
    if not told:
        return
    more = f"; and {len(told) - _TOLD} more" if len(told) > _TOLD else ""
    starts = f"{apart} of {len(used[0])} starts"
    notes.cautions.append(
        f"{name}: at {starts} not the same members count in both ({'; '.join(told[:_TOLD])}{more})"
    )
