"""The stages of a night: what each rests on, and what it does in a folder of its own."""

from __future__ import annotations

import contextlib
import math
import re
from abc import ABC, abstractmethod
from collections.abc import Iterable, Sequence
from dataclasses import asdict
from importlib.metadata import version
from pathlib import Path
from typing import Any, ClassVar

from ensemble_horizon.errors import InputError
from ensemble_horizon.night.chain.fingerprint import canonical
from ensemble_horizon.night.chain.report import number
from ensemble_horizon.night.chain.state import write_plain
from ensemble_horizon.night.chain.work import Work, settings_of_all
from ensemble_horizon.night.estimate import Estimate, estimate_input
from ensemble_horizon.night.input import open_input
from ensemble_horizon.night.mapping import map_plan
from ensemble_horizon.night.verification.rolling import rolling_scores, write_rolling
from ensemble_horizon.night.writing import drawn_by, map_ground, write_estimate
from ensemble_horizon.products.limits import Limit, limits
from ensemble_horizon.runs.faults import Effect, Fault
from ensemble_horizon.runs.files import find_files
from ensemble_horizon.runs.verdict import in_order
from ensemble_horizon.settings import Settings
from ensemble_horizon.vocabulary import Status

_HEADER_KEYS = (
    "runs.members", "runs.control", "runs.minimum_members", "runs.incomplete", "runs.lagged",
    "variables.*.source", "variables.*.speed", "variables.*.position", "variables.*.level",
)  # fmt: skip
_ERROR_NUMBER = re.compile(r"\[Errno -?\d+\] *")
_PATH = re.compile(r"(?<![\w.])(?:/[^/\s:'\",]+)+/([^/\s:'\",]+)")


class Stage(ABC):
    """One stage of the chain.

    Attributes
    ----------
    name : str
    after : tuple of str
        Stages whose results it uses.
    keys : tuple of str
        Keys of the settings that it depends on.
    """

    name: ClassVar[str]
    after: ClassVar[tuple[str, ...]] = ()
    keys: ClassVar[tuple[str, ...]]

    def skipped(self, work: Work) -> str | None:
        """Why there is nothing to do, or None."""
        return None

    @abstractmethod
    def inputs(self, work: Work) -> list[str]:
        """Files that it rests on, and that must not change while it reads."""

    def rests_on(self, work: Work) -> Any:
        """Whatever else it rests on, as plain values."""
        return None

    @abstractmethod
    def run(self, work: Work, folder: Path) -> dict[str, Any]:
        """Do the work, write products into the folder, and return what was found."""


class Survey(Stage):
    """Headers of tonight's files: who is there, who is not, and what is wrong."""

    name = "survey"
    keys = (*_HEADER_KEYS, "variables.*.label")

    def inputs(self, work: Work) -> list[str]:
        """Tonight's files."""
        return [file.path for file in work.tonight.look.files]

    def rests_on(self, work: Work) -> Any:
        """The start, and which members are late; not how long they were waited for."""
        return [work.tonight.start, list(work.tonight.look.late)]

    def run(self, work: Work, folder: Path) -> dict[str, Any]:
        """Refuse runs that cannot be used; tell the faults of the others."""
        found = open_input(work.settings, files=work.tonight.look.files)
        report = found.report
        write_plain(folder / "survey.json", report.as_dict())
        members = list(found.catalogue.members)
        late = work.tonight.look.late
        everyone = in_order({*report.members, *report.missing, *late})
        return {
            "members": members,
            "expected": everyone,
            "missing": [label for label in everyone if label not in members],
            "faults": [fault.as_dict() for fault in report.faults],
            "troubles": sentences(report.faults, work.settings),
        }


class EstimateStage(Stage):
    """Spread, growth, limits and maps, with the calibration in force."""

    name = "estimate"
    after = ("survey",)
    keys = (
        *_HEADER_KEYS,
        "variables.*", "regions", "sites", "growth", "climatology.names",
        "products.maps", "products.map_intervals", "products.coastline", "products.figures",
    )  # fmt: skip

    def inputs(self, work: Work) -> list[str]:
        """Tonight's files, the climatology and the calibration."""
        settings = work.settings
        tables = (settings.climatology, settings.calibration)
        named = [str(settings.path(table.file)) for table in tables if table is not None]
        return [*(file.path for file in work.tonight.look.files), *named]

    def run(self, work: Work, folder: Path) -> dict[str, Any]:
        """Estimate and write the products."""
        settings, progress = work.settings, work.progress
        given = open_input(settings, files=work.tonight.look.files)
        found = estimate_input(settings, given, map_plan(settings, given.catalogue), progress)
        about = about_stage(work, self, found.catalogue.paths)
        write_estimate(folder, settings, found, about, progress)
        told = [fault for fault in found.faults if fault not in given.faults]
        return {
            "used": _used(found),
            "faults": [fault.as_dict() for fault in told],
            "troubles": sentences(told, settings),
            "members_left_out": _left_out(settings, told),
            "limits": [plain_limit(limit) for limit in limits(found.results)],
        }


class Verify(Stage):
    """Past starts held against what has come true since."""

    name = "verify"
    keys = (
        *_HEADER_KEYS,
        "variables.*", "regions", "sites", "growth.confidence", "climatology", "analyses",
        "observations", "verification", "night.verify_starts", "products.figures",
    )  # fmt: skip

    def skipped(self, work: Work) -> str | None:
        """Without analyses and observations."""
        if work.settings.analyses is None and not work.settings.observations:
            return "no analyses and no observations named"
        return None

    def inputs(self, work: Work) -> list[str]:
        """Analyses, observations and climatology; past runs are read once, and not watched."""
        settings = work.settings
        named = [str(settings.path(table.file)) for table in settings.observations.values()]
        if settings.climatology is not None:
            files = (settings.climatology.file, settings.climatology.mean_file)
            named += [str(settings.path(name)) for name in files if name is not None]
        if settings.analyses is not None:
            with contextlib.suppress(InputError):  # none yet: a note tells it
                found = find_files(settings.files(settings.analyses.files))
                named += [file.path for file in found]
        return named

    def rests_on(self, work: Work) -> Any:
        """The start before which all others lie."""
        return work.tonight.start

    def run(self, work: Work, folder: Path) -> dict[str, Any]:
        """Verify what can be verified, file it, and score the last starts."""
        settings, progress = work.settings, work.progress
        everything, shelf = settings_of_all(settings), work.archive / "scores"
        found = rolling_scores(everything, work.tonight.start, shelf, progress)
        write_rolling(
            folder, found, about_stage(work, self, found.inputs),
            figures=settings.products.figures,
            ground=map_ground(settings),
            draw=drawn_by(settings.engine.workers, progress),
        )  # fmt: skip
        told: dict[str, Any] = {"troubles": list(found.troubles)}
        if found.troubles:
            told["reason"] = found.troubles[0]
        if found.too_early:
            told["nothing_to_do"] = "no start has become verifiable yet"
        return {
            **told,
            "starts": list(found.starts),
            "past_skill": [asdict(item) for item in found.skill()],
            "no_skill": found.no_skill(),
            "notes": list(found.notes),
            "left_out": list(found.left_out),
        }


def about_stage(work: Work, stage: Stage, inputs: Sequence[str]) -> dict[str, Any]:
    """Where products come from: of the settings only what they depend on, so that it stays true."""
    return {
        "inputs": list(inputs),
        "settings": canonical(work.part(*stage.keys)),
        "version": version("ensemble-horizon"),
        "command": "ensemble-horizon nightly",
        "created": work.made(),
    }


def sentences(faults: Iterable[Fault], settings: Settings) -> list[str]:
    """Faults in sentences for the reader of a briefing; notes left out.

    Files by their names alone, variables by their labels; the report has paths and keys.
    """
    found = []
    for fault in faults:
        if fault.effect is Effect.note:
            continue
        file = "" if fault.file is None else Path(fault.file).name
        what = f"File {file}" if fault.member is None else f"Member {fault.member}"
        if fault.variable is not None:
            table = settings.variables.get(fault.variable)
            what += f", {(table and table.label) or fault.variable}"
        message = fault.message if fault.file is None else fault.message.replace(fault.file, file)
        message = _PATH.sub(r"\1", _ERROR_NUMBER.sub("", message)).rstrip(".")
        found.append(f"{what}: {message}{_outcome(fault, settings.runs.incomplete)}.")
    return list(dict.fromkeys(found))


def _outcome(fault: Fault, incomplete: str) -> str:
    """What was done about a fault."""
    if fault.kind == "missing-member":
        return ""
    if fault.effect is Effect.incomplete and incomplete == "use" and fault.member is not None:
        return "; what there is of it is used"
    return "; left out"


def plain_limit(limit: Limit) -> dict[str, Any]:
    """A limit as plain values."""
    beyond = limit.status is Status.beyond_run and math.isnan(limit.horizon)
    return {
        "variable": limit.variable,
        "place": limit.place,
        "criterion": limit.criterion,
        "status": limit.status.name,
        "horizon": "beyond_run" if beyond else number(limit.horizon),
        "low": number(limit.low),
        "high": number(limit.high),
        "units": limit.horizon_units,
    }


def _left_out(settings: Settings, faults: Iterable[Fault]) -> list[int | str]:
    """Members that were left out for their values, from one variable at least."""
    policy = settings.runs.incomplete
    effects = {Effect.wrong, Effect.incomplete} if policy == "drop" else {Effect.wrong}
    named = {fault.member for fault in faults if fault.effect in effects}
    return in_order({label for label in named if label is not None})


def _used(found: Estimate) -> list[int]:
    """Fewest and most members that a curve rests on."""
    counts = [int(n) for result in found.results for n in result.curves["members"].values.flat]
    return [min(counts), max(counts)]
