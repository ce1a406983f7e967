"""What the reading itself brought to light about the members."""

from __future__ import annotations

import logging
from collections.abc import Sequence

import numpy as np

from ensemble_horizon.errors import InputError
from ensemble_horizon.night.reading import Damage
from ensemble_horizon.night.variables import Variable
from ensemble_horizon.runs import Catalogue
from ensemble_horizon.runs.faults import Effect, Fault
from ensemble_horizon.runs.report import and_more, name_leads
from ensemble_horizon.spread.reduction import MemberFields

Found = tuple[str, int, int | None, str]

log = logging.getLogger(__name__)


def faults_of(
    summary: MemberFields,
    damage: Damage,
    catalogue: Catalogue,
    variable: Variable,
    start: int,
    without: frozenset[int] = frozenset(),
) -> list[Fault]:
    """Faults of the members of one start, found while their values were reduced.

    Parameters
    ----------
    summary : MemberFields
    damage : Damage
        Fields that could not be read.
    variable : Variable
        Its name in the settings, its units and its plausible range go into the messages.
    without : frozenset of int
        Members by position that were left out of the reading.
    """
    here = np.isfinite(summary.low)
    held = np.ones_like(here)
    for part in variable.parts:
        held &= catalogue.present(part)[start]
    held[:, list(without)] = False
    for place in damage:
        held[place] = False
    found = _unreadable(damage, catalogue.leads)
    found += _missing_cells(summary, held, here, catalogue.leads)
    found += _implausible(summary, variable, catalogue.leads)
    found += _identical(summary, here, catalogue.members)
    return [
        Fault(
            kind,
            member=catalogue.members[member],
            start=catalogue.start_label(start),
            lead=None if lead is None else float(catalogue.leads[lead]),
            message=message,
            variable=variable.name,
        )
        for kind, member, lead, message in found
    ]


def unusable(faults: Sequence[Fault], catalogue: Catalogue, policy: str) -> frozenset[int]:
    """Members by position that are not to be used, told with their faults.

    Parameters
    ----------
    policy : str
        ``runs.incomplete`` of the settings.

    Raises
    ------
    InputError
        if the policy is to stop at the first fault.
    """
    serious = [item for item in faults if item.effect is not Effect.note]
    for item in serious:
        log.warning("member %s, %s at %s: %s", item.member, item.variable, item.start, item.message)
    if serious and policy == "stop":
        raise _stopped_by(serious)
    drop = [i for i in serious if policy == "drop" or i.effect is Effect.wrong]
    return frozenset(
        catalogue.members.index(item.member) for item in drop if item.member is not None
    )


def _stopped_by(serious: Sequence[Fault]) -> InputError:
    """The refusal of runs that must be without faults."""
    first = serious[0]
    return InputError(
        f"member {first.member} at {first.start}",
        expected="members without faults, as runs.incomplete = 'stop' asks",
        found=f"{first.variable}: {first.message}" + and_more(len(serious) - 1),
        remedy="mend the files, or set runs.incomplete to 'drop' or 'use'",
    )


def too_few(
    summary: MemberFields,
    what: str,
    faults: Sequence[Fault],
    without: frozenset[int],
    least: int,
) -> InputError | None:
    """The refusal of a start that is left with fewer than ``least`` members, and what took them."""
    usable = np.isfinite(summary.low).any(axis=0)
    usable[list(without)] = False
    left = int(usable.sum())
    if left >= least:
        return None
    causes = [i for i in faults if i.effect is not Effect.note]
    because = ""
    if causes:
        because = f"; member {causes[0].member}: {causes[0].message}{and_more(len(causes) - 1)}"
    return InputError(
        what,
        expected=f"at least {least} usable members (runs.minimum_members)",
        found=f"{left}{because}",
        remedy="mend the files named by the survey, or lower runs.minimum_members",
    )


def _unreadable(damage: Damage, leads: np.ndarray) -> list[Found]:
    found: list[Found] = []
    for member in sorted({member for _, member in damage}):
        bad = sorted(lead for lead, other in damage if other == member)
        message = f"{name_leads(leads[bad])} cannot be read: {damage[bad[0], member]}"
        found.append(("unreadable-data", member, bad[0], message))
    return found


def _missing_cells(
    summary: MemberFields, held: np.ndarray, here: np.ndarray, leads: np.ndarray
) -> list[Found]:
    """Members with more gaps than the mask that most members share.

    held, here : (T, M) whether the files hold the member at a lead, and whether it has any value
    """
    found: list[Found] = []
    here = here & held
    usual = np.zeros(here.shape[0], dtype=np.int64)
    for lead in range(here.shape[0]):
        if here[lead].any():
            usual[lead] = np.median(summary.gaps[lead][here[lead]])
    # A lead at which no member has a value is nobody's fault.
    told = np.asarray(here.any(axis=1))
    extra = held & told[:, np.newaxis] & (summary.gaps > usual[:, np.newaxis])
    for member in np.flatnonzero(extra.any(axis=0)):
        bad = np.flatnonzero(extra[:, member])
        most = int(summary.gaps[bad, member].max())
        empty = np.flatnonzero(extra[:, member] & ~here[:, member])
        if empty.size == bad.size:
            message = f"no value at all at {name_leads(leads[empty])}"
        else:
            cells = "1 cell" if most == 1 else f"{most} cells"
            message = (
                f"{cells} without a value, more than most members, at {name_leads(leads[bad])}"
            )
        found.append(("missing-cells", int(member), int(bad[0]), message))
    return found


def _implausible(summary: MemberFields, variable: Variable, leads: np.ndarray) -> list[Found]:
    if variable.plausible is None:
        return []
    lowest, highest = variable.plausible
    found: list[Found] = []
    with np.errstate(invalid="ignore"):
        outside = (summary.low < lowest) | (summary.high > highest)
    for member in np.flatnonzero(outside.any(axis=0)):
        bad = np.flatnonzero(outside[:, member])
        ends = summary.low[bad, member].min(), summary.high[bad, member].max()
        low, high = sorted(variable.in_results(end) for end in ends)
        least, most = sorted(variable.in_results(end) for end in (lowest, highest))
        message = (
            f"values from {low:.6g} to {high:.6g}, outside the plausible {least:.6g} to "
            f"{most:.6g} {variable.value_units}, at {name_leads(leads[bad])}"
        )
        found.append(("implausible-values", int(member), int(bad[0]), message))
    return found


def _identical(
    summary: MemberFields, here: np.ndarray, labels: tuple[int | str, ...]
) -> list[Found]:
    """Members whose sampled values equal those of an earlier member at every common lead."""
    values, low, high = summary.sample_values, summary.low, summary.high
    found: list[Found] = []
    copies: set[int] = set()
    varied = np.ptp(np.nan_to_num(values), axis=(0, 2)).any(axis=-1)
    for second in range(values.shape[1]):
        for first in range(second):
            both = here[:, first] & here[:, second]
            if first in copies or both.sum() < 2 or not varied[second]:
                continue
            same = np.array_equal(values[both, first], values[both, second], equal_nan=True)
            # Smallest and largest value of the whole field: a second look beyond the sample.
            same &= np.array_equal(low[both, first], low[both, second])
            if same and np.array_equal(high[both, first], high[both, second]):
                copies.add(second)
                message = f"identical to member {labels[first]} wherever sampled"
                found.append(("identical-members", second, None, message))
                break
    return found
