"""What the values of a start say of its members, and which of them are not to be used."""

from __future__ import annotations

import logging
from dataclasses import dataclass, field

import numpy as np

from ensemble_horizon.night.health import faults_of, too_few, unusable
from ensemble_horizon.night.reading import Damage
from ensemble_horizon.night.variables import Variable
from ensemble_horizon.runs import Catalogue, Fault
from ensemble_horizon.runs.verdict import name_members
from ensemble_horizon.settings import Settings
from ensemble_horizon.spread.reduction import note_health

log = logging.getLogger(__name__)


@dataclass
class Members:
    """Gaps and extremes of M members at T leads, and what could not be read.

    gaps, low, high : (T, M), see `ensemble_horizon.spread.reduction.Summary`
    sample_values : (T, M, 1, 1) sums over the points, by which copies of a member are found
    """

    sample_values: np.ndarray
    gaps: np.ndarray
    low: np.ndarray
    high: np.ndarray
    damage: Damage = field(default_factory=dict)

    def add(self, part: Members, first: int) -> None:
        """Take in one block, whose first lead is ``first``."""
        leads = slice(first, first + part.low.shape[0])
        self.sample_values[leads] += part.sample_values
        self.gaps[leads] += part.gaps
        self.low[leads] = np.fmin(self.low[leads], part.low)
        self.high[leads] = np.fmax(self.high[leads], part.high)
        self.damage |= part.damage

    def outside(self, plausible: tuple[float, float] | None) -> list[int]:
        """Members with a value outside the plausible range, by position."""
        if plausible is None:
            return []
        lowest, highest = plausible
        with np.errstate(invalid="ignore"):
            outside = (self.low < lowest) | (self.high > highest)
        return np.flatnonzero(outside.any(axis=0)).tolist()

    def less(self, without: frozenset[int]) -> Members:
        """The same as if some members had no value."""
        chosen = list(without)
        low, high = self.low.copy(), self.high.copy()
        low[:, chosen] = high[:, chosen] = np.nan
        return Members(self.sample_values, self.gaps, low, high, self.damage)


def no_members(leads: int, members: int) -> Members:
    """A record with nothing in it yet."""
    nothing = np.full((leads, members), np.nan)
    shape = (leads, members)
    return Members(
        np.zeros((*shape, 1, 1)), np.zeros(shape, dtype=np.int64), nothing, nothing.copy()
    )


def members_of(values: np.ndarray, damage: Damage) -> Members:
    """What a block of values (M, T, P) says of its members, and what of it could not be read."""
    members, leads, _ = values.shape
    found = no_members(leads, members)
    found.damage = damage
    for lead in range(leads):
        note_health(found, lead, values[:, lead])
        for member in range(members):
            row = values[member, lead]
            # One by one: the rounding of a sum over rows could differ between equal rows.
            total = row.sum if not found.gaps[lead, member] else row[np.isfinite(row)].sum
            found.sample_values[lead, member] = total(dtype=float)
    return found


@dataclass(frozen=True)
class Judged:
    """What was wrong with a start.

    Parameters
    ----------
    faults : list of Fault
    without : frozenset of int
        Members by position not to be used at this start: all of them, where the start is left out.
    left_out : str
        Why the whole start is left out; empty where it is not.
    """

    faults: list[Fault]
    without: frozenset[int]
    left_out: str = ""


def judge(
    members: Members, catalogue: Catalogue, variable: Variable, start: int, settings: Settings
) -> Judged:
    """Find members that are not to be used at a start, by the rules of `estimate`.

    Raises
    ------
    InputError
        if the settings ask for runs without faults and there is one.
    """
    without: frozenset[int] = frozenset()
    known: list[Fault] = []
    while True:
        seen = members.less(without)
        faults = faults_of(seen, members.damage, catalogue, variable, start, without)
        fresh = [item for item in faults if item not in known]
        known += fresh
        bad = unusable(fresh, catalogue, settings.runs.incomplete) - without
        if not bad:
            break
        without |= bad
    what = f"{variable.name} at {catalogue.start_label(start)}"
    refusal = too_few(members, what, known, without, settings.runs.minimum_members)
    if refusal is not None:
        text = f"{what}: left out, expected {refusal.expected}, found {refusal.found}"
        log.warning("%s", text)
        return Judged(known, frozenset(range(len(catalogue.members))), text)
    if without:
        names = name_members([catalogue.members[number] for number in sorted(without)])
        log.warning("%s: verifying again without %s", what, names)
    return Judged(known, without)
