"""Lagged ensembles: members from different starts, aligned on the valid time.

The start of the ensemble is the latest of the members' starts, and the lead counts from there. The
leads are the valid times that every start covers: from the latest first time to the earliest last
time, not before the latest start, and held by at least half of the starts. Inside that span a
field that a member lacks stays NaN, so that a gap shows; outside it members would come and go, and
the spread would jump with them.
"""

from __future__ import annotations

from collections import Counter, defaultdict
from collections.abc import Sequence
from dataclasses import replace

import numpy as np

from ensemble_horizon.errors import InputError
from ensemble_horizon.runs.faults import Fault
from ensemble_horizon.runs.headers import Layout
from ensemble_horizon.runs.times import OUTSIDE, iso_text

Label = int | str


def align_lagged(layouts: Sequence[Layout], faults: list[Fault]) -> list[Layout]:
    """Give all layouts the latest start, and leads counted from it.

    Members without a number are numbered by their start, the latest being 0; members whose number
    occurs under several starts are told apart as ``2024-01-05T00:00 3``. Adds a note to ``faults``.

    Raises
    ------
    InputError
        If there are no valid times that every start covers.
    """
    starts = np.unique(np.concatenate([layout.start.ravel() for layout in layouts]))
    latest = int(starts[-1])
    kept = _common_times(layouts, starts)
    calendar = layouts[0].calendar
    span = f"{iso_text(int(starts[0]), calendar)} to {iso_text(latest, calendar)}"
    if kept.size == 0:
        raise InputError(
            layouts[0].source.path,
            expected="valid times common to all starts of the lagged ensemble",
            found=f"none, with {starts.size} starts from {span}",
            remedy="choose files whose runs overlap, or set lagged = false",
        )
    faults.append(
        Fault(
            "lagged-starts",
            start=iso_text(latest, calendar),
            message=f"a lagged ensemble of {starts.size} starts, {span}; "
            f"leads count from the latest start, {kept.size} valid times are common",
        )
    )
    shared = _labels_under_several_starts(layouts)
    aligned = []
    for layout in layouts:
        valid = layout.start + layout.lead
        lead = np.where(np.isin(valid, kept), valid - latest, OUTSIDE)
        member = _lagged_labels(layout, starts, shared)
        start = np.full(layout.start.shape, latest, dtype=np.int64)
        aligned.append(replace(layout, start=start, lead=lead, member=member))
    return aligned


def settle_differing_starts(layouts: list[Layout], faults: list[Fault]) -> list[Layout]:
    """Deal with members that do not share their starts, outside a lagged ensemble.

    Where more than half of the members share one start, the files of the others are faults and
    are left out.

    Raises
    ------
    InputError
        If every member occurs under one start only, and no start holds most of the members.
    """
    starts_of: dict[Label, set[int]] = defaultdict(set)
    for layout in layouts:
        for label, start in zip(_labels(layout).flat, layout.start.flat, strict=True):
            starts_of[label].add(int(start))
    starts = sorted({start for found in starts_of.values() for start in found})
    if len(starts) < 2 or len(starts_of) < 2 or any(len(s) > 1 for s in starts_of.values()):
        return layouts
    counts = Counter(next(iter(found)) for found in starts_of.values())
    usual, count = counts.most_common(1)[0]
    calendar = layouts[0].calendar
    if 2 * count <= len(starts_of) or any(np.unique(layout.start).size > 1 for layout in layouts):
        raise InputError(
            layouts[0].source.path,
            expected="members that share their starts",
            found=f"{len(starts_of)} members, each under one of {len(starts)} starts only "
            f"({iso_text(starts[0], calendar)} to {iso_text(starts[-1], calendar)})",
            remedy="set lagged = true if this is a lagged ensemble, "
            "or choose the files of one start",
        )
    kept = []
    for layout in layouts:
        own = int(layout.start.flat[0])
        if own == usual:
            kept.append(layout)
            continue
        faults.append(
            Fault(
                "start-differs",
                file=layout.source.path,
                member=_labels(layout).flat[0],
                start=iso_text(own, calendar),
                message=f"starts at {iso_text(own, calendar)}, where {count} of "
                f"{len(starts_of)} members start at {iso_text(usual, calendar)}",
            )
        )
    return kept


def _common_times(layouts: Sequence[Layout], starts: np.ndarray) -> np.ndarray:
    times: dict[int, set[int]] = defaultdict(set)
    for layout in layouts:
        valid = layout.start + layout.lead
        for start in np.unique(layout.start).tolist():
            times[start].update(np.unique(valid[layout.start == start]).tolist())
    first = max(*(min(found) for found in times.values()), int(starts[-1]))
    last = min(max(found) for found in times.values())
    counts = Counter(time for found in times.values() for time in found)
    kept = [t for t, n in counts.items() if first <= t <= last and 2 * n >= len(times)]
    return np.array(sorted(kept), dtype=np.int64)


def _labels_under_several_starts(layouts: Sequence[Layout]) -> set[Label]:
    starts_of: dict[Label, set[int]] = defaultdict(set)
    for layout in layouts:
        if layout.member is not None:
            for label, start in zip(layout.member.flat, layout.start.flat, strict=True):
                starts_of[label].add(int(start))
    return {label for label, found in starts_of.items() if len(found) > 1}


def _lagged_labels(layout: Layout, starts: np.ndarray, shared: set[Label]) -> np.ndarray:
    labels = np.empty(layout.start.size, dtype=object)
    for index, start in enumerate(layout.start.ravel().tolist()):
        if layout.member is None:
            labels[index] = int(starts.size - 1 - np.searchsorted(starts, start))
        else:
            label = layout.member.flat[index]
            text = f"{iso_text(start, layout.calendar)} {label}"
            labels[index] = text if shared else label
    return labels.reshape(layout.start.shape)


def _labels(layout: Layout) -> np.ndarray:
    assert layout.member is not None
    return layout.member
