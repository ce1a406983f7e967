"""The record that a briefing is made from, be it a page or a printed sheet."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from datetime import datetime
from typing import TYPE_CHECKING

from ensemble_horizon.errors import ArgumentError
from ensemble_horizon.products.limits import Limit, VariableResult, limits
from ensemble_horizon.products.page.versions_table import VersionsTable
from ensemble_horizon.products.places import BARE, Ground
from ensemble_horizon.products.score_sentences import PastSkill
from ensemble_horizon.products.tables import shortest_first
from ensemble_horizon.vocabulary import START

if TYPE_CHECKING:
    from ensemble_horizon.horizon.usual import Usual


@dataclass(frozen=True)
class Briefing:
    """All that is told of one start.

    Attributes
    ----------
    title : str
        Name of the settings, as people know it.
    start : str
        Start of the forecast in ISO 8601 (UTC), as `products.wording.iso_start` writes it.
    made : datetime
        Time of making, UTC.
    results : tuple of VariableResult
        Curves and maps of each variable, of this one start.
    members : str
        Members used, in words: ``"19 of 20 members"``.
    usual : mapping
        What is usual of each (variable, place, criterion).
    troubles : tuple of str
        What was wrong with the input, one plain sentence each; empty where nothing was.
    surveyed : bool
        Whether the files were looked at; if not, the absence of troubles says nothing.
    ground : Ground
        Regions, sites and coasts of the maps.
    versions : VersionsTable, optional
        How two versions compare.
    skill : tuple of PastSkill
        Past skill by variable and place.
    no_skill : str
        Why there is none, one plain sentence.
    notes : tuple of str
        Plain sentences on what else a reader should know.
    version : str
        Version of the program.

    Raises
    ------
    ArgumentError
        If there is no variable, or one with other than one start.
    """

    title: str
    start: str
    made: datetime
    results: tuple[VariableResult, ...]
    members: str
    usual: Mapping[tuple[str, str, str], Usual] = field(default_factory=dict)
    troubles: tuple[str, ...] = ()
    surveyed: bool = True
    ground: Ground = BARE
    versions: VersionsTable | None = None
    skill: tuple[PastSkill, ...] = ()
    no_skill: str = ""
    notes: tuple[str, ...] = ()
    version: str = ""

    def __post_init__(self) -> None:
        counts = [result.curves.sizes.get(START, 0) for result in self.results]
        if not counts or any(count != 1 for count in counts):
            raise ArgumentError(
                "briefing",
                expected="results of at least one variable, one start each",
                found=f"starts per variable: {counts or 'no variable'}",
                remedy="select one start of each result",
            )

    def limits(self) -> list[Limit]:
        """Return the limits of all variables in the order of the settings."""
        return limits(self.results)

    def usual_of(self, limit: Limit) -> Usual | None:
        """Return what is usual of the variable, place and criterion of ``limit``."""
        return self.usual.get((limit.variable, limit.place, limit.criterion))

    def shortest_first(self) -> list[Limit]:
        """Return the limits by how soon they come, those without a number last."""
        return sorted(self.limits(), key=shortest_first)
