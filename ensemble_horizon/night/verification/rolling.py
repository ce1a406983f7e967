"""Rolling verification: each start is verified once, when it can be, and its sums are filed."""

from __future__ import annotations

import logging
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np

from ensemble_horizon.night.estimate import Progress, silent
from ensemble_horizon.night.verification.definition import what_differs
from ensemble_horizon.night.verification.newly import Verifier, verifiable_settings
from ensemble_horizon.night.verification.past import PastRuns
from ensemble_horizon.night.verification.pooling import common_leads, pooled
from ensemble_horizon.night.verification.results import VerifiedResult
from ensemble_horizon.night.verification.shelf import Shelf
from ensemble_horizon.products import Drawing, Ground, draw_in_turn
from ensemble_horizon.products.nights import date_of
from ensemble_horizon.products.places import BARE
from ensemble_horizon.products.score_folder import write_scores
from ensemble_horizon.products.score_sentences import PastSkill, past_skill
from ensemble_horizon.products.score_sums import StartSums, VariableSums
from ensemble_horizon.serial.starts import start_names
from ensemble_horizon.settings import Settings

STARTS = 30  # where the settings have no table [night]
_TURNS = 4  # newest sums that are looked at for the length of the runs

log = logging.getLogger(__name__)


@dataclass(frozen=True)
class RollingScores:
    """Scores of the last starts that could be verified.

    Parameters
    ----------
    results : one per variable, without maps; none where nothing is verified yet
    starts : labels of the starts that the scores rest on, in order of time
    verified : those of them that were verified now
    archived : those of them whose sums were in the archive
    missing : starts of the window that nothing is known of
    waiting : starts before tonight whose last valid time nothing can be held against yet
    inputs : files of sums that the scores rest on
    left_out : valid times without truth, and starts that do not count, in words
    notes : what else a reader should know, in sentences: of the archive and of the settings
    troubles : what kept starts from being verified at all, in sentences
    too_early : whether there is nothing to verify yet
    """

    results: tuple[VerifiedResult, ...] = ()
    starts: tuple[str, ...] = ()
    verified: tuple[str, ...] = ()
    archived: tuple[str, ...] = ()
    missing: tuple[str, ...] = ()
    waiting: tuple[str, ...] = ()
    inputs: tuple[str, ...] = ()
    left_out: tuple[str, ...] = ()
    notes: tuple[str, ...] = ()
    troubles: tuple[str, ...] = ()
    too_early: bool = False

    def skill(self) -> tuple[PastSkill, ...]:
        """What is known of each variable and place, in words."""
        return tuple(item for result in self.results for item in past_skill(result))

    def no_skill(self) -> str:
        """Why no past start is verified; empty where one is."""
        if self.results:
            return ""
        if self.troubles or self.notes:
            return " ".join(self.troubles or self.notes)
        if self.waiting:
            waiting = f"{len(self.waiting)} past starts wait"
            if len(self.waiting) == 1:
                waiting = f"the start {self.waiting[0]} waits"
            return f"No past start is verified: {waiting} for what their last valid time came to."
        return "No past start is verified: there is none before tonight."


def rolling_scores(
    settings: Settings,
    tonight: str | np.datetime64,
    folder: Path,
    progress: Progress = silent,
) -> RollingScores:
    """Verify what has become verifiable before tonight, file it, and score the last starts.

    Parameters
    ----------
    settings : Settings
        ``night.verify_starts`` says how many starts count.
    tonight : ISO label of a start, or datetime64
        Only starts before it are looked at.
    folder : path
        Where the sums are filed, one file a start: ``scores`` in the archive. Made if need be.
    progress : callable

    Returns
    -------
    RollingScores
        Without results, and with a note that says why, where nothing can be verified.

    Raises
    ------
    SettingsError
        if a variable cannot be verified as the settings say.
    ProductError
        if the sums cannot be filed.

    Notes
    -----
    A start is verified when its last valid time is not after the newest analysis, or where only
    observations are named, the newest observation; analyses that are lacking before it are listed.
    The scores are those of `verify` of the same starts in one pass, up to rounding, without maps.
    Sums count together only where their fingerprints agree (`definition`): those of other settings
    are verified again if the runs are still there, those of another grid or other units than the
    newest are left out, and both are named. A start that cannot be verified is tried again as long
    as it is among the last; those that were verified are not read again.
    """
    notes: list[str] = []
    scored = verifiable_settings(settings, notes)
    if scored is None:
        return RollingScores(notes=tuple(notes))
    return _Window(scored, date_of(tonight), Shelf(folder), progress, notes).scores()


def write_rolling(
    folder: Path,
    found: RollingScores,
    provenance: Mapping[str, Any],
    *,
    figures: bool = True,
    ground: Ground = BARE,
    draw: Callable[[Sequence[Drawing]], None] = draw_in_turn,
) -> list[Path]:
    """Write the score products of a night into ``folder``; nothing where there are no scores.

    They do not tell which starts were verified now and which before, so that a night done again
    gives the same products.

    Parameters
    ----------
    folder, provenance, figures, ground, draw
        As in `write_scores`. Inputs are the files of sums, whatever the provenance says.

    Raises
    ------
    ProductError
        if the folder cannot be written.
    """
    if not found.results:
        return []
    about = {**provenance, "inputs": list(found.inputs)}
    about["starts"] = f"{found.starts[0]} to {found.starts[-1]}"
    if found.left_out:
        about["not_verified"] = "; ".join(found.left_out)
    return write_scores(
        folder, found.results, about, notes=found.left_out, figures=figures, ground=ground,
        draw=draw,
    )  # fmt: skip


class _Window:
    """The last starts that are filed or can be verified."""

    def __init__(
        self,
        settings: Settings,
        tonight: np.datetime64,
        shelf: Shelf,
        progress: Progress,
        notes: list[str],
    ) -> None:
        self.settings, self.shelf, self.progress, self.notes = settings, shelf, progress, notes
        self.size = STARTS if settings.night is None else settings.night.verify_starts
        self.filed = {start for start in shelf.starts() if start < tonight}
        self.runs = PastRuns(settings, tonight)
        self.verifier = Verifier(settings, self.runs)
        self.known: dict[np.datetime64, StartSums] = {}
        self.window: list[np.datetime64] = []
        self.waiting: list[np.datetime64] = []
        self.left_out: list[str] = []
        self._looked_at: set[np.datetime64] = set()

    def scores(self) -> RollingScores:
        """Verify and file what is to be, then score all."""
        verified = self._verify(self._choose())
        used, results = self._pool()
        starts = sorted(set().union(*used.values()))
        gone = [start for start in self.window if start not in starts]
        lost = [
            start for start in gone if start not in self.known and start not in self.runs.starts
        ]
        if lost:
            names = ", ".join(_labels(lost))
            self.left_out.append(f"{names}: neither sums nor runs are there any more")
        inputs = [str(self.shelf.path(start)) for start in starts]
        return RollingScores(
            tuple(results),
            _labels(starts),
            _labels(start for start in starts if start in verified),
            _labels(start for start in starts if start not in verified),
            _labels(gone),
            _labels(self.waiting),
            tuple(inputs),
            (*self._gaps(used), *self.left_out, *self.verifier.failures()),
            (*self.notes, *self.shelf.notes),
            self._troubles(len(starts)),
            not (self.window or self.verifier.trouble or self.shelf.notes),
        )

    def _troubles(self, scored: int) -> tuple[str, ...]:
        """What kept all starts from being verified, and what the scores rest on then."""
        if not self.verifier.trouble:
            return ()
        rest = f"{scored} starts" if scored > 1 else "only start"
        told = (
            f"No further past start could be verified; the scores are of the {rest} in the archive."
            if scored
            else "No past start could be verified."
        )
        text = f"{told} {self.verifier.trouble}"
        log.warning("%s", text)
        return (text,)

    def _choose(self) -> list[np.datetime64]:
        """Fill the window, newest first; return the starts that are to be verified."""
        todo = []
        there = set(self.runs.starts)
        # First those that tell how long runs are, also where long and short ones take turns.
        for start in sorted(self.filed, reverse=True)[:_TURNS]:
            self._read(start)
        for start in sorted(self.filed | there, reverse=True):
            if len(self.window) == self.size:
                break
            if start in self.filed:
                self._read(start)
            lacking = self.verifier.lacking(self.known.get(start))
            if lacking and start in there and self.verifier.can_verify(start):
                todo.append(start)
            elif start not in self.filed:
                self.waiting.append(start)
                continue
            self.window.append(start)
        return todo

    def _read(self, start: np.datetime64) -> None:
        """Read the sums of a start, once."""
        if start in self._looked_at:
            return
        self._looked_at.add(start)
        found = self.shelf.read(start)
        if found is not None:
            self.known[start] = found
            self.verifier.learn(found)

    def _verify(self, todo: Sequence[np.datetime64]) -> set[np.datetime64]:
        """Verify starts, newest first, and file each at once: a killed run goes on from there."""
        done = set()
        for number, start in enumerate(todo, start=1):
            before = self.known.get(start)
            found = self.verifier.verify(start, before, todo)
            if found is not None:
                self.shelf.file(found)
                self.known[start] = found
                done.add(start)
            self.progress("past starts", number, len(todo))
        return done

    def _pool(self) -> tuple[dict[str, list[np.datetime64]], list[VerifiedResult]]:
        """Starts used of each variable, and its scores."""
        used: dict[str, dict[np.datetime64, VariableSums]] = {}
        for name in self.settings.variables:
            sound, other = self._of_equal_settings(name)
            for why, starts in other.items():
                self._leave_out(name, starts, f"were verified {why}, and cannot be again")
            if not sound:
                continue
            newest = sound[max(sound)]
            used[name] = {s: item for s, item in sound.items() if item.ground == newest.ground}
            strange = [start for start in sound if start not in used[name]]
            if strange:
                label = _labels([max(sound)])[0]
                self._leave_out(name, strange, f"have another grid or other units than {label}")
        if not used:
            return {}, []
        lead = common_leads(item for rows in used.values() for item in rows.values())
        results = [
            pooled(self.settings, [rows[start] for start in sorted(rows)], lead)
            for rows in used.values()
        ]
        return {name: sorted(rows) for name, rows in used.items()}, results

    def _of_equal_settings(
        self, name: str
    ) -> tuple[dict[np.datetime64, VariableSums], dict[str, list[np.datetime64]]]:
        """Sums of a variable by start, and starts whose sums are of other settings by what."""
        sound: dict[np.datetime64, VariableSums] = {}
        other: dict[str, list[np.datetime64]] = {}
        wanted = self.verifier.fingerprints[name]
        for start in self.window:
            item = self.known[start].variable(name) if start in self.known else None
            if item is not None and item.settings == wanted:
                sound[start] = item
            elif item is not None:
                other.setdefault(what_differs(item.settings, wanted), []).append(start)
        return sound, other

    def _leave_out(self, name: str, starts: Sequence[np.datetime64], why: str) -> None:
        labels = ", ".join(_labels(starts))
        text = f"{name}: left out, because they {why}: {labels}"
        log.warning("%s", text)
        self.left_out.append(text)

    def _gaps(self, used: Mapping[str, Sequence[np.datetime64]]) -> list[str]:
        found = []
        for name, starts in used.items():
            for start in starts:
                item = self.known[start].variable(name)
                label = _labels([start])[0]
                found += [f"{label}: {gap}" for gap in (item.gaps if item is not None else ())]
        return found


def _labels(starts: Any) -> tuple[str, ...]:
    return tuple(start_names(np.array(sorted(starts), dtype="datetime64[s]")))
