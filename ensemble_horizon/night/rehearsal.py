"""A rehearsal: a twin experiment run and written as an archive of runs and analyses."""

from __future__ import annotations

import contextlib
from collections.abc import Generator
from dataclasses import dataclass, replace
from datetime import datetime, timedelta
from importlib.metadata import version
from itertools import product
from pathlib import Path
from typing import NamedTuple

import numpy as np

from ensemble_horizon.night.engine import Engine, cluster_of, shared, usable_cores
from ensemble_horizon.night.estimate import Progress, silent
from ensemble_horizon.products.archive_folder import (
    ANALYSES,
    CLIMATOLOGY,
    TRUTH,
    ArchiveFolder,
    estimate_settings,
)
from ensemble_horizon.products.run_archive import (
    ArchiveFrame,
    FieldFrame,
    RunFile,
    member_files,
    series_file,
    start_file,
    write_climatology,
)
from ensemble_horizon.products.writing import written_whole
from ensemble_horizon.settings.rehearsal import Rehearsal
from ensemble_horizon.toys import (
    FieldPlan,
    Moment,
    System,
    TwinExperiment,
    analysis_at,
    follow_truth,
    run_forecast,
)

_SMALL = 5e6  # numbers advanced by a step below which worker processes cost more than they save
_TOGETHER = 8  # leads, or times of analysis, that are put on the grid and written at once


@dataclass(frozen=True)
class Rehearsed:
    """What a rehearsal wrote: starts made now and found there, settings files by version."""

    folder: Path
    experiment: TwinExperiment
    made: int
    found: int
    settings: dict[str, Path]
    differing: tuple[Path, ...]  # settings files that stood there and hold something else


class _Start(NamedTuple):
    """A task: one start of one version, its truth, and its date."""

    version: str
    moment: Moment
    date: datetime


class _Job(NamedTuple):
    """What every task needs."""

    experiment: TwinExperiment
    plan: FieldPlan
    frame: ArchiveFrame
    archive: ArchiveFolder


def rehearse(settings: Rehearsal, progress: Progress = silent) -> Rehearsed:
    """Run the experiment of the settings and write its archive; complete one that was begun.

    Parameters
    ----------
    settings : Rehearsal
    progress : callable
        Called with the name of a stage, what is done of it, and its total.

    Raises
    ------
    ProductError
        If the folder holds anything else, or cannot be written.
    ArgumentError
        If a run stops being finite: version, start, time and step are named.
    """
    experiment = settings.experiment()
    plan = settings.plan(experiment)
    archive = ArchiveFolder(settings.folder, settings.archive.layout, experiment.members)
    job = _Job(experiment, plan, _frame(settings, experiment, plan), archive)
    texts = {name: _settings_for(settings, job, name) for name in experiment.versions}
    archive.claim(settings.fingerprint(), settings.text)
    dates = _dates(settings, experiment)
    todo = {
        (name, number)
        for name, (number, date) in product(experiment.versions, enumerate(dates))
        if not archive.has(name, date)
    }
    total = len(experiment.versions) * len(dates)
    progress("forecasts", total - len(todo), total)
    cluster = None
    if todo:
        cluster = cluster_of(settings.engine, settings.base, folder=archive.path)
    with (
        Engine(_workers(settings, experiment, len(todo)), job, cluster) as engine,
        contextlib.closing(_tasks(job, dates, todo)) as tasks,
    ):
        for done, _ in enumerate(engine.run(_forecast, tasks), start=total - len(todo) + 1):
            progress("forecasts", done, total)
    files = {name: archive.path / f"{name}.toml" for name in texts}
    differing = tuple(file for name, file in files.items() if not _write_once(file, texts[name]))
    return Rehearsed(archive.path, experiment, len(todo), total - len(todo), files, differing)


def _tasks(
    job: _Job, dates: list[datetime], todo: set[tuple[str, int]]
) -> Generator[_Start, None, None]:
    """Follow the truth, write what it gives, and hand out every start as it comes to it."""
    experiment = job.experiment
    paths = [job.archive.path / name for name in (TRUTH, ANALYSES, CLIMATOLOGY)]
    if not todo and all(path.is_file() for path in paths):
        return
    with contextlib.ExitStack() as stack:
        series = _Series(job, stack)
        for moment in follow_truth(experiment):
            series.add(moment)
            number, rest = divmod(moment.step, experiment.start_steps)
            if rest or not 0 <= number < experiment.starts:
                continue
            for name in experiment.versions:
                if (name, number) in todo:
                    yield _Start(name, moment, dates[number])
        series.finish()


def _forecast(task: _Start) -> None:
    """Run one start of one version and write it (in a worker)."""
    job: _Job = shared()
    system = job.experiment.version(task.version).system
    frame = replace(
        job.frame,
        attributes={**job.frame.attributes, **_model_attributes(task.version, system)},
    )
    hours = (task.date - frame.epoch) / timedelta(hours=1)
    writer = start_file if job.archive.layout == "start" else member_files
    with writer(job.archive.run(task.version, task.date), frame, hours) as run:
        for block in run_forecast(job.experiment, task.version, task.moment, _TOGETHER):
            fields = job.plan.fields(system, block.states)
            run.put(block.first, {field.name: field.values for field in fields})


class _Series:
    """Truth and analyses written as they come, and the climatology of the truth."""

    def __init__(self, job: _Job, stack: contextlib.ExitStack) -> None:
        self._job = job
        self._moments: list[Moment] = []
        self._first = 0
        self._moments_seen = 0
        self._mean: dict[str, np.ndarray] = {}
        self._square: dict[str, np.ndarray] = {}
        experiment = job.experiment
        count = experiment.analysis_count
        hours = np.round(np.arange(count) * experiment.lead_spacing * experiment.hours, 9)
        self._files: dict[str, RunFile] = {}
        for name, what in ((TRUTH, "truth"), (ANALYSES, "analyses, truth and error")):
            target = job.archive.path / name
            if not target.is_file():
                writer = series_file(target, job.frame, hours, what)
                self._files[name] = stack.enter_context(writer)

    def add(self, moment: Moment) -> None:
        """Take the next moment of the truth."""
        self._moments.append(moment)
        if len(self._moments) == _TOGETHER or moment.step < 0 <= moment.step + self._every:
            self._flush()

    def finish(self) -> None:
        """Write what is left, and the climatology."""
        self._flush()
        target = self._job.archive.path / CLIMATOLOGY
        deviation = {
            name: np.sqrt(square / max(self._moments_seen - 1, 1))
            for name, square in self._square.items()
        }
        if not target.is_file():
            what = "climatology of the truth"
            write_climatology(target, self._job.frame, deviation, self._mean, self._span, what)

    @property
    def _every(self) -> int:
        return self._job.experiment.lead_steps

    @property
    def _span(self) -> tuple[float, float]:
        """Hours from the first moment that was seen to the last analysis."""
        experiment = self._job.experiment
        last = experiment.analysis_count - 1
        hours = experiment.lead_spacing * experiment.hours
        return (last + 1 - self._moments_seen) * hours, last * hours

    def _flush(self) -> None:
        if not self._moments:
            return
        experiment = self._job.experiment
        truth = self._fields(np.stack([moment.truth for moment in self._moments]))
        self._learn(truth)
        if self._moments[0].step >= 0:
            if TRUTH in self._files:
                self._files[TRUTH].put(self._first, truth)
            if ANALYSES in self._files:
                states = [analysis_at(experiment, moment) for moment in self._moments]
                self._files[ANALYSES].put(self._first, self._fields(np.stack(states)))
            self._first += len(self._moments)
        self._moments = []

    def _fields(self, states: np.ndarray) -> dict[str, np.ndarray]:
        found = self._job.plan.fields(self._job.experiment.system, states)
        return {field.name: field.values for field in found}

    def _learn(self, fields: dict[str, np.ndarray]) -> None:
        """Add to the running mean and sum of squares (Chan et al. 1983, Am. Stat. 37)."""
        count = len(self._moments)
        total = self._moments_seen + count
        for name, values in fields.items():
            mean = values.mean(axis=0)
            square = np.sum((values - mean) ** 2, axis=0)
            if self._moments_seen:
                shift = mean - self._mean[name]
                square += self._square[name] + shift**2 * (self._moments_seen * count / total)
                mean = self._mean[name] + shift * (count / total)
            self._mean[name], self._square[name] = mean, square
        self._moments_seen = total


def _frame(settings: Rehearsal, experiment: TwinExperiment, plan: FieldPlan) -> ArchiveFrame:
    fields = plan.fields(experiment.system, experiment.system.default_state())
    return ArchiveFrame(
        coordinates=plan.coordinates(),
        fields=[FieldFrame(field.name, field.dims, field.attributes) for field in fields],
        leads=experiment.lead_hours(),
        members=experiment.members,
        epoch=settings.first_start,
        precision=settings.archive.precision,
        compression=settings.archive.compression,
        attributes={
            "title": settings.title,
            "institution": "not stated",
            "history": f"made by ensemble-horizon {version('ensemble-horizon')}, toy run",
            "comment": "A rehearsal with a toy system: no forecast of anything.",
            **_model_attributes("truth", experiment.system),
        },
    )


def _model_attributes(name: str, system: System) -> dict[str, str]:
    values = ", ".join(f"{key}={item.value:g}" for key, item in system.parameters.items())
    return {
        "source": f"{name}: {system.title} ({values})",
        "references": system.source,
    }


def _dates(settings: Rehearsal, experiment: TwinExperiment) -> list[datetime]:
    spacing = timedelta(hours=round(experiment.start_spacing * experiment.hours, 9))
    return [settings.first_start + number * spacing for number in range(experiment.starts)]


def _settings_for(settings: Rehearsal, job: _Job, name: str) -> str:
    criteria = settings.criteria.model_dump()
    return estimate_settings(
        settings.title, job.archive, name, job.frame.fields, criteria, job.experiment.control
    )


def _write_once(target: Path, text: str) -> bool:
    """Write a text unless the file is there, as settings are for editing; whether it holds it."""
    if target.is_file():
        return target.read_text(encoding="utf-8") == text
    with written_whole(target) as neighbour:
        neighbour.write_text(text, encoding="utf-8")
    return True


def _workers(settings: Rehearsal, experiment: TwinExperiment, runs: int) -> int:
    steps = max(experiment.steps_per_lead(name)[1] for name in experiment.versions)
    work = runs * experiment.members * experiment.leads * steps * experiment.system.size
    if settings.engine.workers is None and work < _SMALL:
        return 1
    return max(1, min(settings.engine.workers or usable_cores(), runs))
