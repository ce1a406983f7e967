"""Checks on the values that the content pass has read: one function per suspicion."""

from __future__ import annotations

from collections import Counter
from collections.abc import Iterator

import numpy as np

from ensemble_horizon.runs.catalogue import Catalogue
from ensemble_horizon.runs.content import Content
from ensemble_horizon.runs.faults import Fault
from ensemble_horizon.runs.report import name_leads
from ensemble_horizon.runs.verdict import name_members

Pair = tuple[float, float] | None


def suspects(catalogue: Catalogue, content: Content, plausible: Pair) -> Iterator[Fault]:
    """Everything suspect about the values of one variable at one start.

    Parameters
    ----------
    plausible : pair of float, or None
        The range that ``content`` was read with.
    """
    for check in (_unreadable, _missing_cells, _values, _constant, _identical):
        yield from check(catalogue, content, plausible)


def _unreadable(catalogue: Catalogue, content: Content, _: Pair) -> Iterator[Fault]:
    for member in np.flatnonzero(content.unreadable.any(axis=0)):
        bad = content.unreadable[:, member]
        path = catalogue.file_of_member(content.variable, content.start, int(member))
        error = content.errors.get(path or "", "damaged")
        message = f"{name_leads(catalogue.leads[bad])} cannot be read: {error}"
        yield _fault("unreadable-data", catalogue, content, member, bad, message)


def _missing_cells(catalogue: Catalogue, content: Content, _: Pair) -> Iterator[Fault]:
    """Masks that differ from the one that most members share, lead by lead."""
    read = content.digest >= 0
    extra = np.zeros_like(read)
    varying, shared = [], []
    for lead in range(read.shape[0]):
        row = content.mask[lead][read[lead]]
        if row.size == 0:
            continue
        usual, count = Counter(row.tolist()).most_common(1)[0]
        if 2 * count <= row.size and row.size > 1:
            varying.append(lead)
            extra[lead] = read[lead] & (content.missing[lead] == content.size)
            continue
        extra[lead] = read[lead] & (content.mask[lead] != usual)
        common = int(content.missing[lead][read[lead] & (content.mask[lead] == usual)][0])
        if common:
            shared.append((lead, common))
    for member in np.flatnonzero(extra.any(axis=0)):
        bad = extra[:, member]
        most = int(content.missing[bad, member].max())
        message = (
            f"{content.variable!r} has up to {most} missing of {content.size} cells at "
            f"{name_leads(catalogue.leads[bad])}, where the other members differ"
        )
        yield _fault("missing-cells", catalogue, content, member, bad, message)
    text = catalogue.start_label(content.start)
    if shared:
        cells = max(count for _, count in shared)
        yield Fault("common-mask", start=text, variable=content.variable,
                    message=f"{content.variable!r} has up to {cells} missing of {content.size} "
                    "cells common to the members")  # fmt: skip
    if varying:
        yield Fault("varying-mask", start=text, variable=content.variable,
                    message=f"the missing cells of {content.variable!r} change from member to "
                    f"member at {name_leads(catalogue.leads[varying])}")  # fmt: skip


def _values(catalogue: Catalogue, content: Content, pair: Pair) -> Iterator[Fault]:
    infinite = np.isinf(content.low) | np.isinf(content.high)
    for member in np.flatnonzero(infinite.any(axis=0)):
        bad = infinite[:, member]
        message = f"{content.variable!r} is infinite at {name_leads(catalogue.leads[bad])}"
        yield _fault("infinite-values", catalogue, content, member, bad, message)
    if pair is None:
        return
    units = catalogue.variables[content.variable].units
    unit = f", in {units} as in the file" if units else ""
    for member in np.flatnonzero((content.outside > 0).any(axis=0)):
        bad = content.outside[:, member] > 0
        low, high = content.low[bad, member].min(), content.high[bad, member].max()
        message = (
            f"{content.variable!r} goes from {low:.6g} to {high:.6g} at "
            f"{name_leads(catalogue.leads[bad])}, outside the plausible {pair[0]:g} to {pair[1]:g}"
            f" ({int(content.outside[bad, member].sum())} cells){unit}"
        )
        yield _fault("implausible-values", catalogue, content, member, bad, message)


def _constant(catalogue: Catalogue, content: Content, _: Pair) -> Iterator[Fault]:
    """Members that are one number throughout; where all are, there is none to be blamed."""
    if content.size < 2:
        return
    read = content.digest >= 0
    flat = (content.constant | ~read).all(axis=0) & read.any(axis=0)
    if flat.all():
        if np.isfinite(content.low).any():
            yield _all_constant(catalogue, content)
        return
    for member in np.flatnonzero(flat):
        value = content.low[:, member][read[:, member]][0]
        if np.isnan(value):
            continue
        message = f"{content.variable!r} is {value:g} everywhere and at every lead"
        yield _fault("constant-fields", catalogue, content, member, read[:, member], message)


def _all_constant(catalogue: Catalogue, content: Content) -> Fault:
    low, high = np.nanmin(content.low), np.nanmax(content.high)
    numbers = f"{low:g}" if low == high else f"from {low:g} to {high:g}"
    return Fault(
        "constant-everywhere",
        start=catalogue.start_label(content.start),
        variable=content.variable,
        message=f"every field of {content.variable!r} is constant, at every lead and in every "
        f"member ({numbers}): there is no spread to measure over the grid",
    )


def _identical(catalogue: Catalogue, content: Content, _: Pair) -> Iterator[Fault]:
    """Pairs of members whose fields are equal to the bit at all, or at some, common leads.

    Leads at which all members are equal, as at the release of floats, tell nothing of pairs.
    """
    telling = (content.digest >= 0) & (
        ~content.constant if content.size > 1 else np.ones_like(content.unreadable)
    )
    one = np.where(telling, content.digest, content.digest.max(axis=1, keepdims=True))
    shared = (np.ptp(one, axis=1) == 0) & (telling.sum(axis=1) > 2)
    if shared.any() and not shared[telling.any(axis=1)].all():
        telling[shared] = False
        yield Fault(
            "identical-leads",
            start=catalogue.start_label(content.start),
            lead=float(catalogue.leads[shared][0]),
            message=f"all members are identical in {content.variable!r} at "
            + name_leads(catalogue.leads[shared]),
            variable=content.variable,
        )
    copies: set[int] = set()
    for second in range(content.digest.shape[1]):
        for first in range(second):
            if first in copies:
                continue
            both = telling[:, first] & telling[:, second]
            equal = both & (content.digest[:, first] == content.digest[:, second])
            if not equal.any():
                continue
            pair = name_members([catalogue.members[first], catalogue.members[second]])
            if (equal == both).all() and (content.size > 1 or both.sum() > 2):
                copies.add(second)
                message = f"{pair} are identical to the bit in {content.variable!r}"
                yield _fault("identical-members", catalogue, content, second, equal, message)
                break
            if content.size > 1:
                message = f"{pair} are identical in {content.variable!r} at " + name_leads(
                    catalogue.leads[equal]
                )
                yield _fault("identical-leads", catalogue, content, second, equal, message)


def _fault(
    kind: str,
    catalogue: Catalogue,
    content: Content,
    member: int | np.integer,
    leads: np.ndarray,
    message: str,
) -> Fault:
    return Fault(
        kind,
        file=catalogue.file_of_member(content.variable, content.start, int(member)),
        member=catalogue.members[int(member)],
        start=catalogue.start_label(content.start),
        lead=float(catalogue.leads[leads][0]),
        message=message,
        variable=content.variable,
    )
