"""What the reading itself brought to light about the members."""

from __future__ import annotations

import numpy as np

from ensemble_horizon.runs import Catalogue
from ensemble_horizon.runs.faults import Fault
from ensemble_horizon.spread.reduction import Summary


def faults_of(
    summary: Summary,
    catalogue: Catalogue,
    variable: str,
    start: int,
    plausible: tuple[float, float] | None,
) -> list[Fault]:
    """Faults of the members of one start, found while their values were reduced.

    Parameters
    ----------
    summary : Summary
    variable : str
        Name in the settings, for the messages.
    plausible : (lowest, highest), optional
        In the units of the files.
    """
    here = _here(summary)
    found = _missing_cells(summary, here)
    if plausible is not None:
        found += _implausible(summary, plausible)
    found += _identical(summary, here, catalogue.members)
    return [
        Fault(
            kind,
            member=catalogue.members[member],
            start=catalogue.start_label(start),
            lead=None if lead is None else float(catalogue.leads[lead]),
            message=message,
            variable=variable,
        )
        for kind, member, lead, message in found
    ]


Found = tuple[str, int, int | None, str]


def _here(summary: Summary) -> np.ndarray:
    """(T, M) whether a member has any value at a lead."""
    return np.isfinite(summary.low)


def _missing_cells(summary: Summary, here: np.ndarray) -> list[Found]:
    """Members with more gaps than the mask that most members share."""
    found: list[Found] = []
    usual = np.zeros(here.shape[0], dtype=np.int64)
    for lead in range(here.shape[0]):
        if here[lead].any():
            usual[lead] = np.median(summary.gaps[lead][here[lead]])
    extra = here & (summary.gaps > usual[:, np.newaxis])
    for member in np.flatnonzero(extra.any(axis=0)):
        leads = np.flatnonzero(extra[:, member])
        most = int(summary.gaps[leads, member].max())
        message = f"{most} cells without a value, more than most members, at {leads.size} leads"
        found.append(("missing-cells", int(member), int(leads[0]), message))
    return found


def _implausible(summary: Summary, plausible: tuple[float, float]) -> list[Found]:
    found: list[Found] = []
    with np.errstate(invalid="ignore"):
        outside = (summary.low < plausible[0]) | (summary.high > plausible[1])
    for member in np.flatnonzero(outside.any(axis=0)):
        leads = np.flatnonzero(outside[:, member])
        low, high = summary.low[leads, member].min(), summary.high[leads, member].max()
        message = (
            f"values from {low:.6g} to {high:.6g}, outside the plausible {plausible[0]:.6g} to "
            f"{plausible[1]:.6g} (units of the files), at {leads.size} leads"
        )
        found.append(("implausible-values", int(member), int(leads[0]), message))
    return found


def _identical(summary: Summary, here: np.ndarray, labels: tuple[int | str, ...]) -> list[Found]:
    """Members whose sampled values equal those of an earlier member at every common lead."""
    values, low, high = summary.sample_values, summary.low, summary.high
    found: list[Found] = []
    copies: set[int] = set()
    varied = np.ptp(np.nan_to_num(values), axis=(0, 2)) > 0
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
