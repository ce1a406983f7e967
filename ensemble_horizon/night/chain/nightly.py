"""One night from the choice of its start to the archive, begun anew or gone on with."""

from __future__ import annotations

import contextlib
import logging
import re
import shutil
from dataclasses import dataclass
from importlib.metadata import version
from pathlib import Path
from time import monotonic

from ensemble_horizon.errors import EnsembleHorizonError, InputError
from ensemble_horizon.night.chain import publishing
from ensemble_horizon.night.chain.attempt import Attempt
from ensemble_horizon.night.chain.closing import PAGES, Brief, archived, with_usual
from ensemble_horizon.night.chain.fingerprint import (
    Mark,
    Marks,
    changed_files,
    fingerprint,
    lasting,
    marks_of,
)
from ensemble_horizon.night.chain.lock import IfBusy, locked
from ensemble_horizon.night.chain.members import Clock, choose_start
from ensemble_horizon.night.chain.owner import claim, require_own
from ensemble_horizon.night.chain.report import NightReport, utc_text
from ensemble_horizon.night.chain.stages import EstimateStage, Stage, Survey, Verify
from ensemble_horizon.night.chain.state import (
    STAGE_FILE,
    NightState,
    StageRecord,
    digests_in,
    read_stage,
    read_state,
    write_sealed,
)
from ensemble_horizon.night.chain.work import (
    Work,
    night_table,
    reading_errors,
    settings_of_night,
)
from ensemble_horizon.night.estimate import Progress, silent
from ensemble_horizon.night.products_folder import refuse_estimate
from ensemble_horizon.products.writing import disk_errors, folder_written_whole
from ensemble_horizon.settings import Settings

STAGES: tuple[Stage, ...] = (Survey(), EstimateStage(), Verify(), Brief())
ARCHIVE = "archive"
_ATTEMPTS = 3  # the first, and two more where files change while they are read

log = logging.getLogger(__name__)


@dataclass(frozen=True)
class Options:
    """What the command line says of a night.

    Parameters
    ----------
    start : str, optional
        The start in ISO 8601; by default the newest complete one.
    wait_minutes : float, optional
        How long to wait for late members; by default what the settings say.
    if_busy : "wait" or "leave"
        What to do where another run is at work in the same folder.
    adopt_archive : bool
        Whether to go on with an archive whose record names other runs.
    """

    start: str | None = None
    wait_minutes: float | None = None
    if_busy: IfBusy = "leave"
    adopt_archive: bool = False


class _InputChangedError(Exception):
    """Files changed while a stage read them."""


def run_night(
    settings: Settings,
    options: Options,
    report: NightReport,
    progress: Progress = silent,
    clock: Clock | None = None,
) -> None:
    """Do what is not done, or no longer true, of the stages of a night.

    Parameters
    ----------
    report : NightReport
        Filled on the way; it tells of a night that failed, too.

    Raises
    ------
    SettingsError
        if there is no table ``[night]``, the start is none, or the archive is that of other runs.
    InputError
        if the runs cannot be used, or keep changing.
    ProductError
        if another run is at work, or something cannot be written, or the folder of products is
        that of an estimate.
    """
    table = night_table(settings)
    report.plan([*(stage.name for stage in STAGES), ARCHIVE])
    products, archive = settings.path(settings.products.folder), settings.path(table.archive)
    publishing.refuse_file("products.folder", products)
    publishing.refuse_file("night.archive", archive)
    refuse_estimate(products)
    with contextlib.ExitStack() as locks:
        for folder in dict.fromkeys((products, archive)):
            locks.enter_context(locked(folder, options.if_busy, utc_text(report.begun)))
        if not options.adopt_archive:
            require_own(settings, archive)
        report.notes += publishing.mend(products)
        publishing.mend_archive(archive)
        minutes = table.wait_minutes if options.wait_minutes is None else options.wait_minutes
        tonight = choose_start(
            settings, options.start, minutes, clock,
            waited=lambda stamp: Attempt(products, stamp).waited,
        )  # fmt: skip
        report.notes += claim(settings, archive)  # not before: a template may be misspelt
        attempt = Attempt(products, tonight.stamp, tonight.start, minutes > 0)
        own = settings_of_night(settings, tonight.start)
        work = Work(own, tonight, lambda: attempt.made, progress)
        _Night(work, products, report, attempt).run()


class _Night:
    """One run over the stages."""

    def __init__(self, work: Work, products: Path, report: NightReport, attempt: Attempt) -> None:
        self.work, self.products, self.report = work, products, report
        self.attempt = attempt
        self.stamp = work.tonight.stamp
        self.folder = products / self.stamp
        self.desk = publishing.work_folder(products, self.stamp)
        self.state = read_state(self.folder)
        self._seen: dict[str, Mark | None] = {}
        report.start, report.folder = work.tonight.start, self.folder
        report.published = self.state is not None

    def run(self) -> None:
        """All stages, the publishing and the archive."""
        publishing.refuse_strange(self.folder)
        log.info("night %s in %s", self.work.tonight.start, self.folder)
        try:
            self._all_stages()
        except BaseException:
            publishing.remove_idle_work(self.products, self.stamp)
            raise
        finally:
            self._tell()
        self._publish()
        self._file()
        publishing.remove_work(self.products, self.stamp)

    def _all_stages(self) -> None:
        """The stages, from the first one again where files changed under their hands."""
        for attempt in range(_ATTEMPTS):
            self.work.records.clear()
            self._seen.clear()
            try:
                for stage in STAGES:
                    self._stage(stage)
                return
            except _InputChangedError as change:
                log.warning("%s changed while it was read", change)
                if attempt == _ATTEMPTS - 1:
                    raise InputError(
                        str(change),
                        expected="a file that stays as it is while it is read",
                        found=f"that it changed in each of {_ATTEMPTS} attempts",
                        remedy="wait until it is written, or wait for it with --wait",
                    ) from change

    def _stage(self, stage: Stage) -> None:
        reason = stage.skipped(self.work)
        if reason is not None:
            self.report.skipped(stage.name, reason)
            return
        begun = monotonic()
        try:
            marks = marks_of(stage.inputs(self.work))
            self._require_seen(marks)
            if not self._kept(stage, self._fingerprint(stage, marks)):
                self._do(stage, marks, begun)
        except EnsembleHorizonError as known:
            error = self._named(known)
            self.report.failed(stage.name, monotonic() - begun, str(error))
            raise error from known
        except _InputChangedError:
            raise
        except BaseException as other:
            reason = "stopped" if isinstance(other, KeyboardInterrupt) else repr(other)
            self.report.failed(stage.name, monotonic() - begun, reason)
            raise

    def _kept(self, stage: Stage, wanted: str) -> bool:
        """Whether the stage stands as it would be made now, published or on the desk."""
        held = [] if self.state is None else [(self.state.stages.get(stage.name), self.folder)]
        held.append((read_stage(self.desk / stage.name), self.desk / stage.name))
        for record, place in held:
            if record is not None and record.fingerprint == wanted and record.holds_in(place):
                self._put(stage, record, place)
                if not self._idle(stage, record):
                    reason = record.found.get("reason")
                    self.report.kept(stage.name, record.seconds, list(record.files), reason)
                return True
        return False

    def _do(self, stage: Stage, marks: Marks, begun: float) -> None:
        """Do a stage in a folder that appears when it is done."""
        place = self.desk / stage.name
        self.attempt.begin()
        with disk_errors(self.folder):
            if place.exists():
                shutil.rmtree(place)
        try:
            with folder_written_whole(place) as folder:
                with reading_errors(self.products):
                    found = stage.run(self.work, folder)
                self._require_unchanged(marks)
                seconds = round(monotonic() - begun, 3)
                record = StageRecord(
                    self._fingerprint(stage, marks), utc_text(self.work.made()), seconds,
                    digests_in(folder), found,
                )  # fmt: skip
                write_sealed(folder / STAGE_FILE, record.as_dict())
        except EnsembleHorizonError:
            self._require_unchanged(marks)
            raise
        self._put(stage, record, place)
        if not self._idle(stage, record):
            reason = record.found.get("reason")
            self.report.done(stage.name, record.seconds, list(record.files), reason)

    def _idle(self, stage: Stage, record: StageRecord) -> bool:
        """Whether a stage looked and found nothing to do, which is told as one that was skipped."""
        reason = record.found.get("nothing_to_do")
        if reason is not None:
            self.report.skipped(stage.name, reason)
        return reason is not None

    def _named(self, error: EnsembleHorizonError) -> EnsembleHorizonError:
        """The error with the folder of the night for that of its work, which nobody knows of."""
        hidden = rf"{re.escape(str(self.desk))}(/\.[a-z]+\.[0-9a-f]{{8}}\.part)?"
        culprit, found = (
            re.sub(hidden, lambda _: str(self.folder), text)
            for text in (error.culprit, error.found)
        )
        return type(error)(culprit, expected=error.expected, found=found, remedy=error.remedy)

    def _require_unchanged(self, marks: Marks) -> None:
        changed = changed_files(marks, marks_of(marks))
        if changed:
            raise _InputChangedError(changed[0])

    def _require_seen(self, marks: Marks) -> None:
        """All stages rest on the same files, not an earlier one on those of a minute ago."""
        for path, mark in marks.items():
            if self._seen.setdefault(path, mark) != mark:
                raise _InputChangedError(path)

    def _fingerprint(self, stage: Stage, marks: Marks) -> str:
        upstream = [self.work.records.get(name) for name in stage.after]
        return fingerprint(
            {
                "version": version("ensemble-horizon"),
                "stage": stage.name,
                "settings": self.work.part(*stage.keys),
                "inputs": lasting(marks),
                "rests_on": stage.rests_on(self.work),
                "after": [record.fingerprint if record else None for record in upstream],
            }
        )

    def _put(self, stage: Stage, record: StageRecord, place: Path) -> None:
        self.work.records[stage.name] = record
        self.work.places[stage.name] = place

    def _publish(self) -> None:
        """Move the folder of the night in, unless it stands there as it would be."""
        records, places = self.work.records, self.work.places
        same = self.state is not None and dict(self.state.stages) == records
        if not (same and all(places[name] == self.folder for name in records)):
            begun = monotonic()
            self.state = NightState(
                self.work.tonight.start, utc_text(self.work.made()), version("ensemble-horizon"),
                dict(records),
            )  # fmt: skip
            try:
                publishing.publish(self.products, self.stamp, self.state, places)
            except EnsembleHorizonError as error:
                raise self._named(error) from error
            log.info("published %s %.2f s", self.folder, monotonic() - begun)
        self.report.published = True
        publishing.copy_newest(self.products, self.stamp, PAGES)

    def _file(self) -> None:
        """The archive comes last: what is usual is told by the nights before, and never by this."""
        begun = monotonic()
        try:
            path, notes, new = archived(self.work, self.folder)
        except EnsembleHorizonError as error:
            self.report.failed(ARCHIVE, monotonic() - begun, str(error))
            raise
        self.report.notes += notes
        if new:
            self.report.done(ARCHIVE, round(monotonic() - begun, 3), [str(path)])
        else:
            self.report.kept(ARCHIVE, None, [str(path)])

    def _tell(self) -> None:
        """Put into the report what the stages found, as far as they came."""
        found = {stage.name: self.work.found(stage.name) for stage in STAGES}
        report, survey = self.report, found[Survey.name]
        used = found[EstimateStage.name].get("used")
        if survey:
            report.members = {
                "used": used[0] if used else len(survey["members"]),
                "expected": len(survey["expected"]),
                "missing": survey["missing"],
                "left_out": found[EstimateStage.name].get("members_left_out", []),
            }
        report.troubles += self.work.tonight.troubles
        for name in found:
            report.faults += found[name].get("faults", [])
            report.troubles += found[name].get("troubles", [])
            report.notes += [*found[name].get("notes", []), *found[name].get("left_out", [])]
        limits = found[EstimateStage.name].get("limits", [])
        report.limits = with_usual(limits, found[Brief.name].get("usual", []))
