"""What reading a block for verification brought to light about the members."""

from __future__ import annotations

import logging

from ensemble_horizon.night.health import stopped_by
from ensemble_horizon.night.reading import Block
from ensemble_horizon.night.variables import Variable
from ensemble_horizon.night.verification.reading import Verified
from ensemble_horizon.runs import Catalogue, Fault
from ensemble_horizon.runs.faults import Effect
from ensemble_horizon.runs.report import name_leads
from ensemble_horizon.settings import Settings

log = logging.getLogger(__name__)


def block_faults(
    part: Verified, block: Block, catalogue: Catalogue, variable: Variable
) -> list[Fault]:
    """Faults of a block; what they touch was left out of it and of nothing else."""
    first, last = block.leads
    found = []
    for (lead, member), message in part.damage.items():
        text = f"{name_leads(catalogue.leads[[lead]])} cannot be read: {message}"
        found.append(_fault("unreadable-data", member, lead, text, block, catalogue))
    for member, ends in part.implausible.items():
        low, high = sorted(variable.in_results(end) for end in ends)
        text = (
            f"values from {low:.6g} to {high:.6g} {variable.value_units}, outside the plausible "
            f"range, at {name_leads(catalogue.leads[first:last])}"
        )
        found.append(_fault("implausible-values", member, first, text, block, catalogue))
    for fault in found:
        log.warning(
            "member %s, %s at %s: %s; left out there",
            fault.member, variable.name, fault.start, fault.message,
        )  # fmt: skip
    return found


def refuse_if_stopped(faults: list[Fault], settings: Settings) -> None:
    """Raise where the settings ask for runs without faults.

    Raises
    ------
    InputError
    """
    serious = [fault for fault in faults if fault.effect is not Effect.note]
    if serious and settings.runs.incomplete == "stop":
        raise stopped_by(serious)


def _fault(
    kind: str, member: int, lead: int, message: str, block: Block, catalogue: Catalogue
) -> Fault:
    return Fault(
        kind,
        member=catalogue.members[member],
        start=catalogue.start_label(block.start),
        lead=float(catalogue.leads[lead]),
        message=message,
    )
