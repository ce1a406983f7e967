"""One block of runs and analyses read and reduced to scores, in one task.

A task reads all members of one start over a block of leads, and the analyses at its valid times,
and gives back sums. Fields go to a file (`Scratch`) or come back for running means; nothing of the
size of the ensemble leaves the process that read it.

Starts that follow each other are held against the same analyses at other leads, so that a process
keeps those that it read last.
"""

from __future__ import annotations

import threading
from collections.abc import Callable, Hashable
from dataclasses import dataclass, field, replace

import numpy as np

from ensemble_horizon.night.engine import shared
from ensemble_horizon.night.reading import Block, Damage, read_part, window_points
from ensemble_horizon.night.verification.faults import Members, members_of
from ensemble_horizon.night.verification.scratch import Scratch
from ensemble_horizon.night.verification.sources import Analyses, Observed
from ensemble_horizon.runs import Catalogue
from ensemble_horizon.skill.reduction import (
    ScoreReduction,
    ScoreSums,
    empty_scores,
    reduce_scores,
)
from ensemble_horizon.spread.reduction import located

# Tasks of one process may run in several threads, on a cluster.
_LOCK = threading.Lock()


@dataclass(frozen=True)
class VerifiedVariable:
    """A variable of the settings, and what it is held against.

    Parameters
    ----------
    name : str
    parts : tuple of str
        One source name, or the two components of a vector whose magnitude is meant.
    plausible : (lowest, highest) in the units of the files, or None
    reduction : ScoreReduction
        Of the grid, against analyses.
    analyses : Analyses, or None
    observed : Observed, or None
    at_sites : ScoreReduction
        Of the observed sites, which are a grid of their own.
    kept : tuple of str
        Fields that go to the scratch file, start by start, and nowhere else.
    """

    name: str
    parts: tuple[str, ...]
    plausible: tuple[float, float] | None
    reduction: ScoreReduction
    analyses: Analyses | None
    observed: Observed | None
    at_sites: ScoreReduction
    kept: tuple[str, ...] = ()


@dataclass
class Recent:
    """Arrays used last, the longest unused going first."""

    room: int = 24 * 2**20  # bytes
    _kept: dict[Hashable, np.ndarray] = field(default_factory=dict)

    def get(self, key: Hashable, make: Callable[[], np.ndarray]) -> np.ndarray:
        """The array of a key, made where it is not at hand; not to be written to."""
        found = self._kept.get(key)
        if found is None:
            found = make()
        with _LOCK:
            if self._kept.pop(key, None) is None:
                self.room -= found.nbytes
            self._kept[key] = found
            while self.room < 0:
                self.room += self._kept.pop(next(iter(self._kept))).nbytes
        return found


@dataclass(frozen=True)
class VerifyingContext:
    """What every task needs: sent to each worker once."""

    catalogue: Catalogue
    variables: tuple[VerifiedVariable, ...]
    scratch: Scratch | None = None
    recent: Recent = field(default_factory=Recent)


@dataclass
class Verified:
    """What a block gives: sums against analyses and against observations, and of its members.

    before : fields that the block gave with all members, where it was read again
    """

    sums: ScoreSums | None
    at_sites: ScoreSums | None
    members: Members
    before: dict[str, np.ndarray] = field(default_factory=dict)


def verify_block(block: Block) -> Verified:
    """Read one block of all members and its analyses, and reduce them: runs in a worker."""
    context: VerifyingContext = shared()
    values, members = _read(context, block)
    found = Verified(None, None, members)
    _reduce(found, values, context, block)
    return found


def verify_again(block: Block) -> Verified:
    """Read one block once more and reduce it without some members: runs in a worker."""
    context: VerifyingContext = shared()
    values, members = _read(context, block)
    found = Verified(None, None, members)
    if context.variables[block.variable].reduction.fields:
        _reduce(found, values, context, block)
        assert found.sums is not None
        found.before = found.sums.fields
    values[list(block.without)] = np.nan
    _reduce(found, values, context, block)
    return found


def _read(context: VerifyingContext, block: Block) -> tuple[np.ndarray, Members]:
    """Values (M, T, P) of a block, NaN of members that are implausible in it, and their health."""
    variable = context.variables[block.variable]
    damage: Damage = {}
    whole = replace(block, without=())
    values = magnitude(
        [read_part(context.catalogue, name, whole, damage) for name in variable.parts]
    )
    values = values.reshape(*values.shape[:2], -1)
    members = members_of(values, damage)
    # At once: running sums of fields could not be freed again of what is out of all proportion.
    values[members.outside(variable.plausible)] = np.nan
    return values, members


def _reduce(found: Verified, values: np.ndarray, context: VerifyingContext, block: Block) -> None:
    variable = context.variables[block.variable]
    points = window_points(context.catalogue.grid.shape, block.window)
    moment = _moment(context.catalogue, block)
    if variable.analyses is not None:
        truth = _analyses(variable.analyses, block, values, context.recent)
        still = _persistence(variable.analyses, block, values.dtype, context.recent)
        found.sums = reduce_scores(values, truth, variable.reduction, points, still, moment)
        _put_aside(found.sums, context.scratch, variable, block, points)
    if variable.observed is not None:
        found.at_sites = _at_sites(values, variable, variable.observed, block, points, moment)


def _moment(catalogue: Catalogue, block: Block) -> tuple[int, int]:
    """What tells a block from others in time, whichever starts are verified along with it."""
    return int(catalogue.start_ticks[block.start]) % 2**63, block.leads[0]


def magnitude(parts: list[np.ndarray]) -> np.ndarray:
    """The only part, or the length of a vector."""
    return parts[0] if len(parts) == 1 else np.hypot(parts[0], parts[1], out=parts[0])


def _analyses(analyses: Analyses, block: Block, values: np.ndarray, recent: Recent) -> np.ndarray:
    truth = np.full(values.shape[1:], np.nan, dtype=values.dtype)
    leads = slice(*block.leads)
    for row, position in enumerate(analyses.position[block.start, leads]):
        if position >= 0:
            truth[row] = _one_analysis(analyses, int(position), block, recent)
    return truth


def _persistence(
    analyses: Analyses, block: Block, dtype: np.dtype, recent: Recent
) -> np.ndarray | None:
    position = int(analyses.at_start[block.start])
    if position < 0:
        return None
    return _one_analysis(analyses, position, block, recent).astype(dtype, copy=False)


def _one_analysis(analyses: Analyses, position: int, block: Block, recent: Recent) -> np.ndarray:
    """One analysis over the window of a block, flattened, in the units of the runs."""

    def read() -> np.ndarray:
        window = tuple(slice(*bounds) for bounds in block.window)
        parts = []
        for name, (scale, offset) in zip(analyses.parts, analyses.scales, strict=True):
            part = analyses.catalogue.read(name, position, window=window)[0, 0]
            parts.append(part if (scale, offset) == (1.0, 0.0) else part * scale + offset)
        return magnitude(parts).ravel()

    return recent.get((block.variable, position, block.window), read)


def _at_sites(
    values: np.ndarray,
    variable: VerifiedVariable,
    observed: Observed,
    block: Block,
    points: np.ndarray | None,
    moment: tuple[int, int],
) -> ScoreSums | None:
    """Scores against observations at the sites that lie in the window."""
    where, which = located(observed.index, points)
    if not which.size:
        return None
    leads = slice(*block.leads)
    found = empty_scores(variable.at_sites, values.shape[0], values.shape[1], observed.index.size)
    # One by one: what one site lacks, persistence say, must not take the others out.
    for column, site in zip(where, which, strict=True):
        still = observed.at_start[block.start, [site]]
        part = reduce_scores(
            values[:, :, [column]].astype(float),
            observed.values[block.start, leads][:, [site]],
            variable.at_sites,
            np.array([site]),
            still if np.isfinite(still).all() else None,
            moment,
        )
        found.add(part, slice(None), None)
    return found


def _put_aside(
    sums: ScoreSums,
    scratch: Scratch | None,
    variable: VerifiedVariable,
    block: Block,
    points: np.ndarray | None,
) -> None:
    if scratch is None:
        return
    for number, name in enumerate(variable.kept):
        rows = sums.fields.pop(name)
        scratch.write(number, block.start, block.leads[0], rows, points)
