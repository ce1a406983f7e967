"""All starts of one variable read and summed, and those with unusable members once more."""

from __future__ import annotations

from collections import Counter
from collections.abc import Callable, Iterator
from dataclasses import replace

import numpy as np

from ensemble_horizon.errors import InputError
from ensemble_horizon.night.engine import Engine
from ensemble_horizon.night.reading import Block, block_budget, plan_blocks, window_points
from ensemble_horizon.night.variables import Variable
from ensemble_horizon.night.verification.faults import Judged, judge, no_members
from ensemble_horizon.night.verification.maps import MapSums
from ensemble_horizon.night.verification.reading import (
    Verified,
    VerifiedVariable,
    verify_again,
    verify_block,
)
from ensemble_horizon.runs import Catalogue, Fault
from ensemble_horizon.settings import Settings
from ensemble_horizon.skill.reduction import ScoreReduction, ScoreSums, empty_scores


class Starts:
    """Sums of all starts of one variable, as they come in.

    Attributes
    ----------
    maps : MapSums
    sums : by what the runs are held against, one a start; empty where a start was left out
    faults : what was wrong with the members
    left_out : why whole starts were left out, in words
    """

    def __init__(
        self,
        settings: Settings,
        catalogue: Catalogue,
        number: int,
        variable: Variable,
        source: VerifiedVariable,
    ) -> None:
        self._settings, self._catalogue = settings, catalogue
        self._number, self._variable, self._source = number, variable, source
        self.maps = MapSums(catalogue.leads.size, source.reduction.size)
        self.sums: dict[str, list[ScoreSums]] = {}
        for what, there in (("analysis", source.analyses), ("observation", source.observed)):
            if there is not None:
                self.sums[what] = [self._empty(what) for _ in range(catalogue.starts.size)]
        shape = (catalogue.leads.size, len(catalogue.members))
        self._members = [no_members(*shape) for _ in range(catalogue.starts.size)]
        self._judged: dict[int, Judged] = {}

    def read(self, engine: Engine, advance: Callable[[int, int], None]) -> None:
        """Read all starts, and a second time those of which a member cannot be used.

        Parameters
        ----------
        advance : callable
            Called with leads that are done, and leads that are to be done over again.

        Raises
        ------
        InputError
            if the settings ask for runs without faults and there is one, or no start is left.
        """
        blocks = list(self._blocks())
        waiting = Counter(block.start for block in blocks)
        again: list[Block] = []
        for position, part in engine.run(verify_block, blocks):
            block = blocks[position]
            self._members[block.start].add(part.members, block.leads[0])
            self._add(block, part)
            waiting[block.start] -= 1
            more = 0
            if not waiting[block.start]:
                again += self._judge(block.start)
                more = self._catalogue.leads.size if self._judged[block.start].without else 0
            advance(block.leads[1] - block.leads[0], more)
        self._require_a_start()
        for start in {block.start for block in again}:
            for what, sums in self.sums.items():
                sums[start] = self._empty(what)
        for position, part in engine.run(verify_again, again):
            block = again[position]
            self.maps.take_back(part.before, slice(*block.leads), self._points(block))
            self._add(block, part)
            advance(block.leads[1] - block.leads[0], 0)

    @property
    def faults(self) -> list[Fault]:
        """Faults of all starts, in their order."""
        return [fault for start in sorted(self._judged) for fault in self._judged[start].faults]

    @property
    def left_out(self) -> list[str]:
        """Why whole starts were left out."""
        found = [self._judged[start].left_out for start in sorted(self._judged)]
        return [text for text in found if text]

    def _add(self, block: Block, part: Verified) -> None:
        span, points = slice(*block.leads), self._points(block)
        if part.sums is not None:
            self.maps.add(part.sums, span, points)
            part.sums.fields.clear()
            self.sums["analysis"][block.start].add(part.sums, span, points)
        if part.at_sites is not None:
            self.sums["observation"][block.start].add(part.at_sites, span, None)

    def _judge(self, start: int) -> list[Block]:
        """The blocks of a start to be read again."""
        found = judge(self._members[start], self._catalogue, self._variable, start, self._settings)
        self._judged[start] = found
        if not found.without:
            return []
        without = tuple(sorted(found.without))
        return [replace(block, without=without) for block in self._blocks(start)]

    def _require_a_start(self) -> None:
        left_out = self.left_out
        if len(left_out) == self._catalogue.starts.size:
            raise InputError(
                f"runs of {self._variable.name}",
                expected="a start with enough usable members (runs.minimum_members)",
                found=left_out[0],
                remedy="mend the files named by the survey, or lower runs.minimum_members",
            )

    def _empty(self, what: str) -> ScoreSums:
        source, runs = self._source, self._catalogue
        reduction = source.at_sites
        if what == "analysis":
            # Without the fields: they are added up over starts.
            reduction = ScoreReduction(source.reduction.size, source.reduction.places)
        return empty_scores(reduction, len(runs.members), runs.leads.size, reduction.size)

    def _blocks(self, *starts: int) -> Iterator[Block]:
        """Blocks of some starts, or of all."""
        budget = block_budget(self._settings.engine)
        for start in starts or range(self._catalogue.starts.size):
            yield from plan_blocks(self._catalogue, self._source.parts, self._number, start, budget)

    def _points(self, block: Block) -> np.ndarray | None:
        return window_points(self._catalogue.grid.shape, block.window)
