"""The report of a night for programs: JSON with a versioned schema.

``"schema": "ensemble-horizon night report 1"``. New keys may come within a version; the meaning of
those below does not change. Numbers are finite, or null where there is none; a lead beyond the end
of the run is the text ``"beyond_run"``. Times are ISO 8601 in UTC, durations in seconds.

===============  ====================================================================
``version``      of the program
``config``       the settings file
``status``       "done", or "failed": then ``error`` says why
``exit_status``  that of the command: 0 done, 1 a fault of ours, 2 settings, usage, or
                 products that cannot be written, 3 the input cannot be used
``begun``        when the run began; ``ended``, ``seconds``
``start``        the start of the forecast; where none was chosen, the one that was
                 asked for, or null
``folder``       of the night; ``published``: whether its products stand there, those
                 of before where this run failed
``stages``       in order, each with ``name``, ``state`` ("done", "kept" from an
                 earlier run, "skipped", "failed", "not reached"), ``seconds`` (of its
                 making, also where it was kept), ``files``, ``reason`` (where skipped
                 or failed, or where it was done and fell short)
``members``      ``used`` and ``expected`` (numbers), ``missing`` (labels of those that
                 are not there or not whole), ``left_out`` (of those that are there,
                 left out for their values from one variable at least)
``faults``       what was wrong with the input: ``kind``, ``effect``, ``message`` and,
                 where they apply, ``file``, ``member``, ``start``, ``lead``,
                 ``variable``
``limits``       ``variable``, ``place``, ``criterion``, ``status``, ``horizon``,
                 ``low``, ``high``, ``units`` (``horizon`` is "beyond_run" where that
                 is the status, and null in the others without a number),
                 ``usual`` (null, or ``nights``,
                 ``median``, ``low``, ``high``, ``percentile``, ``standing``,
                 ``season``)
``troubles``     sentences on the input; ``notes``: sentences on the rest
``error``        null, or ``kind``, ``culprit``, ``expected``, ``found``, ``remedy``
===============  ====================================================================
"""

from __future__ import annotations

import json
import logging
import math
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field
from datetime import UTC, datetime
from importlib.metadata import version
from pathlib import Path
from time import monotonic
from typing import Any

from ensemble_horizon.errors import EnsembleHorizonError
from ensemble_horizon.products.writing import written_whole

SCHEMA = "ensemble-horizon night report 1"
DONE, KEPT, SKIPPED, FAILED, NOT_REACHED = "done", "kept", "skipped", "failed", "not reached"

log = logging.getLogger(__name__)


@dataclass
class StageLine:
    """What became of a stage in this run."""

    name: str
    state: str = NOT_REACHED
    seconds: float | None = None
    files: Sequence[str] = ()
    reason: str | None = None


@dataclass
class NightReport:
    """Filled while the night goes on, so that it tells of a run that failed as well."""

    config: str
    begun: datetime = field(default_factory=lambda: datetime.now(UTC))
    start: str | None = None
    folder: Path | None = None
    published: bool = False
    stages: dict[str, StageLine] = field(default_factory=dict)
    members: Mapping[str, Any] | None = None
    faults: list[Mapping[str, Any]] = field(default_factory=list)
    limits: list[Mapping[str, Any]] = field(default_factory=list)
    troubles: list[str] = field(default_factory=list)
    notes: list[str] = field(default_factory=list)
    _clock: float = field(default_factory=monotonic)

    def plan(self, names: Sequence[str]) -> None:
        """Name the stages, none of them reached."""
        self.stages = {name: StageLine(name) for name in names}

    def done(
        self, name: str, seconds: float, files: Sequence[str], reason: str | None = None
    ) -> None:
        """A stage was done now; ``reason`` tells why it fell short, if it did."""
        self.stages[name] = StageLine(name, DONE, seconds, files, reason)
        log.info("stage %s done %.2f s", name, seconds)

    def kept(
        self, name: str, seconds: float | None, files: Sequence[str], reason: str | None = None
    ) -> None:
        """A stage was done by an earlier run, and still holds."""
        self.stages[name] = StageLine(name, KEPT, seconds, files, reason)
        log.info("stage %s kept", name)

    def skipped(self, name: str, reason: str) -> None:
        """There is nothing to do for a stage."""
        self.stages[name] = StageLine(name, SKIPPED, reason=reason)
        log.info("stage %s skipped: %s", name, reason)

    def failed(self, name: str, seconds: float, reason: str) -> None:
        """A stage could not be done."""
        self.stages[name] = StageLine(name, FAILED, seconds, reason=reason)
        log.error("stage %s failed %.2f s: %s", name, seconds, reason)

    def as_dict(self, error: BaseException | None, exit_status: int) -> dict[str, Any]:
        """The report as plain values; ``error`` is what ended the run, if it failed."""
        return {
            "schema": SCHEMA,
            "version": version("ensemble-horizon"),
            "config": self.config,
            "status": "done" if exit_status == 0 else "failed",
            "exit_status": exit_status,
            "begun": utc_text(self.begun),
            "ended": utc_text(datetime.now(UTC)),
            "seconds": round(monotonic() - self._clock, 3),
            "start": self.start,
            "folder": None if self.folder is None else str(self.folder),
            "published": self.published,
            "stages": [
                {
                    "name": line.name,
                    "state": line.state,
                    "seconds": line.seconds,
                    "files": list(line.files),
                    "reason": line.reason,
                }
                for line in self.stages.values()
            ],
            "members": None if self.members is None else dict(self.members),
            "faults": [dict(fault) for fault in self.faults],
            "limits": [dict(limit) for limit in self.limits],
            "troubles": self.troubles,
            "notes": self.notes,
            "error": None if error is None else _error(error),
        }

    def write(self, path: str | Path, error: BaseException | None, exit_status: int) -> None:
        """Write the report, whole or not at all.

        Raises
        ------
        ProductError
            if it cannot be written there.
        """
        text = json.dumps(
            self.as_dict(error, exit_status), indent=2, ensure_ascii=False, allow_nan=False
        )
        with written_whole(path) as neighbour:
            neighbour.write_text(text + "\n", encoding="utf-8")


def utc_text(moment: datetime) -> str:
    """A moment in UTC as ISO 8601, to the second.

    Examples
    --------
    >>> utc_text(datetime(2031, 2, 14, 6, tzinfo=UTC))
    '2031-02-14T06:00:00Z'
    """
    return f"{moment.astimezone(UTC):%Y-%m-%dT%H:%M:%SZ}"


def number(value: float) -> float | str | None:
    """A number as JSON can hold it.

    Examples
    --------
    >>> number(36.0), number(math.inf), number(math.nan)
    (36.0, 'beyond_run', None)
    """
    if math.isnan(value):
        return None
    return float(value) if math.isfinite(value) else "beyond_run"


def _error(error: BaseException) -> dict[str, Any]:
    if isinstance(error, EnsembleHorizonError):
        parts = {key: getattr(error, key) for key in ("culprit", "expected", "found", "remedy")}
        return {"kind": type(error).__name__, **parts}
    if isinstance(error, KeyboardInterrupt):  # an interrupt, or a request to end
        return {
            "kind": "Stopped", "culprit": "the run", "expected": "it to finish",
            "found": "that it was stopped", "remedy": "run it again; it goes on where it was",
        }  # fmt: skip
    return {
        "kind": type(error).__name__, "culprit": "the program", "expected": "no fault of ours",
        "found": str(error) or type(error).__name__,
        "remedy": "run again with --debug and report what it prints",
    }  # fmt: skip
