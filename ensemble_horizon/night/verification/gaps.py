"""Valid times of the runs that nothing could be held against."""

from __future__ import annotations

import logging
from dataclasses import dataclass

import numpy as np

from ensemble_horizon.errors import InputError
from ensemble_horizon.runs import Catalogue
from ensemble_horizon.runs.times import MICROSECONDS_PER_HOUR, iso_text

_NEAR = MICROSECONDS_PER_HOUR // 2

log = logging.getLogger(__name__)


@dataclass(frozen=True)
class Gap:
    """Valid times that nothing could be held against, in words."""

    variable: str
    what: str
    missing: int
    wanted: int
    names: str

    def __str__(self) -> str:
        return f"{self.variable}: no {self.what} at {self.missing} of {self.wanted}: {self.names}"


def tell_gaps(
    gaps: list[Gap],
    variable: str,
    what: str,
    where: str,
    runs: Catalogue,
    wanted: np.ndarray,
    held: np.ndarray,
    there: np.ndarray,
    needed: bool,
) -> None:
    """Note the valid times that have no match; refuse where one is needed and there is none.

    Parameters
    ----------
    what, where : what should be there, and in which files
    wanted : (S, L) ticks of the valid times
    held : ticks of what is there
    there : (S, L) bool, which of those wanted have a match

    Raises
    ------
    InputError
    """
    every = np.unique(wanted)
    lacking = np.setdiff1d(every, wanted[there])
    if not lacking.size:
        return
    names = [iso_text(int(tick), runs.calendar) for tick in lacking]
    near = _near_misses(held, lacking)
    if needed and not there.any():
        first, last = (
            [iso_text(int(t), runs.calendar) for t in (ticks.min(), ticks.max())]
            for ticks in (held, every)
        )
        raise InputError(
            where,
            expected=f"an {what} of {variable} at one valid time of the runs at least "
            f"({last[0]} to {last[1]})",
            found=f"none; they run from {first[0]} to {first[1]}{near}",
            remedy="correct the times: none is shifted" if near else "name those of these starts",
        )
    listed = ", ".join(names[:8]) + (f" and {len(names) - 8} more" if len(names) > 8 else "")
    gap = Gap(variable, what, lacking.size, every.size, listed + near)
    gaps.append(gap)
    log.warning("%s: skipped", gap)


def _near_misses(held: np.ndarray, lacking: np.ndarray) -> str:
    """How many of the times miss one that is held by minutes only."""
    place = np.searchsorted(held, lacking)
    around = [held[np.clip(place + step, 0, held.size - 1)] for step in (-1, 0)]
    away = np.min([np.abs(lacking - item) for item in around], axis=0)
    close = away[away <= _NEAR]
    if not close.size:
        return ""
    return f"; {close.size} of them miss one by {close.min() / 6e7:g} to {close.max() / 6e7:g} min"
