"""Past starts verified one by one, when their last valid time can be held against something."""

from __future__ import annotations

import logging
from collections.abc import Iterable, Sequence

import numpy as np

from ensemble_horizon.errors import InputError
from ensemble_horizon.night.input import Input
from ensemble_horizon.night.verification.definition import (
    ground_fingerprint,
    settings_fingerprint,
)
from ensemble_horizon.night.verification.past import PastRuns, Truth, last_valid
from ensemble_horizon.night.verification.results import VerifiedResult
from ensemble_horizon.night.verification.verifying import verify_input
from ensemble_horizon.products.score_sums import PlaceSums, StartSums, VariableSums
from ensemble_horizon.runs import Catalogue
from ensemble_horizon.runs.handles import stamp_of
from ensemble_horizon.runs.units import converter
from ensemble_horizon.serial.starts import start_names
from ensemble_horizon.settings import Settings
from ensemble_horizon.vocabulary import HOURS

log = logging.getLogger(__name__)


def verifiable_settings(settings: Settings, notes: list[str]) -> Settings | None:
    """The settings with the variables that can be verified, without maps; None where none can.

    What is left out is told in ``notes``, in sentences.
    """
    if settings.analyses is None and not settings.observations:
        notes.append("Nothing is verified: the settings name neither analyses nor observations.")
        return None
    if settings.runs.lagged:
        notes.append("Nothing is verified: past starts of a lagged ensemble cannot be told apart.")
        return None
    kept = {}
    for name, table in settings.variables.items():
        if table.position is not None:
            notes.append(f"{name} is not verified, because it is a position.")
        elif settings.analyses is None and name not in settings.observations:
            notes.append(
                f"{name} is not verified, because the settings name no observations of it."
            )
        else:
            kept[name] = table
    if not kept:
        return None
    products = settings.products.model_copy(update={"maps": "none"})
    observed = {name: item for name, item in settings.observations.items() if name in kept}
    return settings.model_copy(
        update={"variables": kept, "observations": observed, "products": products}
    )


class Verifier:
    """Verifies starts that can be, as far as their sums are not known.

    Parameters
    ----------
    settings : from `verifiable_settings`
    runs : PastRuns

    Attributes
    ----------
    fingerprints : by variable, of the settings
    trouble : what keeps all starts from being verified; empty where nothing does
    """

    def __init__(self, settings: Settings, runs: PastRuns) -> None:
        self.settings, self._runs = settings, runs
        self.fingerprints = {
            name: settings_fingerprint(settings, name) for name in settings.variables
        }
        self.trouble = runs.trouble
        self._failed: dict[str, list[np.datetime64]] = {}
        self._grounds: dict[str, tuple[np.datetime64, str]] = {}
        self._length: np.timedelta64 | None = None
        self._opened: dict[np.datetime64, Input] = {}
        self._stamps: dict[str, tuple[int, ...]] = {}
        self._held: dict[str, Catalogue] | None = None
        self._truth: Truth | None = None
        if self.trouble:
            return
        try:
            self._truth = Truth(settings)
        except InputError as error:
            self.trouble = str(error)

    def learn(self, found: StartSums) -> None:
        """Take the length of the shortest run, and grid and units of the newest, from sums."""
        for item in found.variables:
            if item.settings != self.fingerprints.get(item.name):
                continue
            length = _length(item)
            self._length = length if self._length is None else min(length, self._length)
            known = self._grounds.get(item.name)
            if known is None or known[0] < found.start:
                self._grounds[item.name] = (found.start, item.ground)

    def lacking(self, held: StartSums | None) -> list[str]:
        """Variables of which there are no sums by these settings."""
        found = []
        for name, fingerprint in self.fingerprints.items():
            item = None if held is None else held.variable(name)
            if item is None or item.settings != fingerprint:
                found.append(name)
        return found

    def can_verify(self, start: np.datetime64) -> bool:
        """Whether a start is over; its headers are read where it may be, and kept.

        One whose headers cannot be read counts as over: why is told when it is verified.
        """
        if self._truth is None:
            return False
        shortest = self._length or np.timedelta64(0, "s")
        if start + shortest > self._truth.newest:
            return False
        try:
            self._opened[start] = self._open(start)
        except InputError:
            return True
        last = last_valid(self._opened[start].catalogue)
        if self._length is None:
            self._length = last - start
        if last > self._truth.newest:
            del self._opened[start]
            return False
        return True

    def verify(
        self, start: np.datetime64, held: StartSums | None, todo: Sequence[np.datetime64]
    ) -> StartSums | None:
        """All sums of a start: those held and those found now; None where none are new.

        Parameters
        ----------
        held : what is known of the start
        todo : all starts that are to be verified, whose analyses are looked up at once
        """
        try:
            truth = self._held_for(todo)
            found = self._opened.pop(start, None) or self._open(start)
        except InputError as error:
            self._fail(error, start)
            return None
        new = {item.name: item for item in self._sums(start, found, self.lacking(held), truth)}
        try:
            self._require_unchanged([found.catalogue, *truth.values()])
        except InputError as error:
            self._fail(error, start)
            return None
        if not new:
            return None
        old = {item.name: item for item in (held.variables if held is not None else ())}
        sums = StartSums(start, tuple((old | new).values()))
        self.learn(sums)
        return sums

    def failures(self) -> list[str]:
        """Why starts could not be verified, each reason with its starts."""
        return [
            f"{', '.join(_names(starts))}: not verified: {reason}"
            for reason, starts in self._failed.items()
        ]

    def _open(self, start: np.datetime64) -> Input:
        found = self._runs.open(start)
        self._mark([found.catalogue])
        return found

    def _mark(self, catalogues: Iterable[Catalogue]) -> None:
        """Note by what files whose headers were read are known again."""
        self._stamps |= {path: stamp_of(path) for path in _paths(catalogues)}

    def _require_unchanged(self, catalogues: Iterable[Catalogue]) -> None:
        """What is filed stays for good, and so must not be of a file and its successor."""
        for path in _paths(catalogues):
            if stamp_of(path) != self._stamps[path]:
                raise InputError(
                    path,
                    expected="a file that stays as it is while it is read",
                    found="that it changed",
                    remedy="run again when it is written; the start is verified then",
                )

    def _fail(self, error: InputError, start: np.datetime64) -> None:
        log.warning("past start %s: %s", _names([start])[0], error)
        self._failed.setdefault(str(error), []).append(start)

    def _held_for(self, todo: Sequence[np.datetime64]) -> dict[str, Catalogue]:
        if self._held is None:
            assert self._truth is not None
            ends = [last_valid(found.catalogue) for found in self._opened.values()]
            self._held = self._truth.held(min(todo), max(ends, default=self._truth.newest))
            self._mark(self._held.values())
        return self._held

    def _sums(
        self,
        start: np.datetime64,
        found: Input,
        names: Sequence[str],
        truth: dict[str, Catalogue],
    ) -> list[VariableSums]:
        """Sums of some variables of a start, each of them alone where they fail together."""
        grounds = {
            name: ground_fingerprint(found.catalogue, self.settings.variables[name].sources(name))
            for name in names
        }
        wanted = [name for name in names if self._fits(name, start, grounds[name])]
        if not wanted:
            return []
        tables = {name: self.settings.variables[name] for name in wanted}
        settings = self.settings.model_copy(update={"variables": tables})
        try:
            verified = verify_input(settings, found, held=truth)
        except InputError as error:
            if len(wanted) == 1:
                self._fail(error, start)
                return []
            parts = (self._sums(start, found, [name], truth) for name in wanted)
            return [item for part in parts for item in part]
        gaps = {
            name: tuple(str(gap) for gap in verified.gaps if gap.variable == name)
            for name in wanted
        }
        return [
            _variable_sums(
                result, self.fingerprints[result.frame.variable],
                grounds[result.frame.variable], gaps[result.frame.variable],
            )
            for result in verified.results
        ]  # fmt: skip

    def _fits(self, name: str, start: np.datetime64, ground: str) -> bool:
        """Whether sums of this grid and these units would count beside newer ones."""
        newest, own = self._grounds.get(name, (start, ground))
        if newest <= start or own == ground:
            return True
        reason = f"{name} has another grid or other units than at {_names([newest])[0]}"
        self._failed.setdefault(reason, []).append(start)
        return False


def _variable_sums(
    result: VerifiedResult, settings: str, ground: str, gaps: tuple[str, ...]
) -> VariableSums:
    frame = result.frame
    against = {
        truth: PlaceSums(tuple((name, kind) for name, kind in result.kinds[truth]), sums[0])
        for truth, sums in result.series.items()
    }
    return VariableSums(
        frame.variable, frame.long_name, frame.units, result.factor, frame.lead, frame.lead_units,
        settings, ground, against, gaps,
    )  # fmt: skip


def _paths(catalogues: Iterable[Catalogue]) -> set[str]:
    """Files that hold something of the starts of catalogues."""
    found = set()
    for runs in catalogues:
        numbers = {int(n) for table in runs.tables for n in np.unique(table.source) if n >= 0}
        found |= {runs.sources[number].path for number in numbers}
    return found


def _length(item: VariableSums) -> np.timedelta64:
    scale = 1.0
    if item.lead_units != "1":
        scale, _ = converter(item.lead_units, HOURS, "lead")
    return np.timedelta64(round(float(item.lead[-1]) * scale * 3600), "s")


def _names(starts: Iterable[np.datetime64]) -> list[str]:
    return start_names(np.array(sorted(starts), dtype="datetime64[s]"))
