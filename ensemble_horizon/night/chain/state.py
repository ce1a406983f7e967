"""What stands in the folder of a night: stages done, what they rested on, digests of their files.

``night.json``::

    {"schema": "ensemble-horizon night 1", "start": "2031-02-14T00:00", "made": "...Z",
     "version": "0.1.0",
     "stages": {"survey": {"fingerprint": "<sha256>", "made": "...Z", "seconds": 0.12,
                           "files": {"survey.json": "<sha256>"}, "found": {...}}, ...},
     "digest": "<sha256>"}

``found`` holds what a stage found, as the report and later stages tell it. ``digest`` is that of
all the rest, so that a damaged state is none.
"""

from __future__ import annotations

import json
from collections.abc import Mapping
from dataclasses import dataclass, field
from pathlib import Path, PurePosixPath
from typing import Any

from ensemble_horizon.night.chain.fingerprint import digest_of, fingerprint
from ensemble_horizon.products.folder import written_files

SCHEMA = "ensemble-horizon night 1"
STATE_FILE = "night.json"
STAGE_FILE = "stage.json"
_DIGEST = "digest"


@dataclass(frozen=True)
class StageRecord:
    """A stage that was done.

    Parameters
    ----------
    fingerprint : str
        Of all that it rested on.
    made : str
        When, as ISO 8601 in UTC.
    seconds : float
        How long it took.
    files : mapping of name to SHA-256
        Names count from the folder of the stage, and later from that of the night.
    found : mapping
        Plain values.
    """

    fingerprint: str
    made: str
    seconds: float
    files: Mapping[str, str]
    found: Mapping[str, Any] = field(default_factory=dict)

    def holds_in(self, folder: Path) -> bool:
        """Whether all files stand there as they were written."""
        try:
            return all(digest_of(folder / name) == sha for name, sha in self.files.items())
        except OSError:
            return False

    def as_dict(self) -> dict[str, Any]:
        """The record as plain values."""
        return {
            "fingerprint": self.fingerprint,
            "made": self.made,
            "seconds": self.seconds,
            "files": dict(self.files),
            "found": dict(self.found),
        }


@dataclass(frozen=True)
class NightState:
    """The stages of one night, by name."""

    start: str
    made: str
    version: str
    stages: Mapping[str, StageRecord]

    def as_dict(self) -> dict[str, Any]:
        """The state as plain values."""
        return {
            "schema": SCHEMA,
            "start": self.start,
            "made": self.made,
            "version": self.version,
            "stages": {name: record.as_dict() for name, record in self.stages.items()},
        }


def digests_in(folder: Path) -> dict[str, str]:
    """Digests of all files below a folder, by name."""
    return {path.relative_to(folder).as_posix(): digest_of(path) for path in written_files(folder)}


def write_sealed(path: Path, content: Mapping[str, Any]) -> None:
    """Write plain values as JSON, with a digest by which damage shows."""
    write_plain(path, {**content, _DIGEST: fingerprint(content)})


def write_plain(path: Path, content: Mapping[str, Any]) -> None:
    """Write plain values as JSON for people and programs."""
    text = json.dumps(content, indent=1, ensure_ascii=False, allow_nan=False)
    path.write_text(text + "\n", encoding="utf-8")


def read_stage(folder: Path) -> StageRecord | None:
    """The record of a finished stage in a folder of its own; None where there is no sound one."""
    return _record(read_sealed(folder / STAGE_FILE))


def read_state(folder: Path) -> NightState | None:
    """The state of a night in its folder; None where there is no sound one."""
    content = read_sealed(folder / STATE_FILE)
    if content is None or content.get("schema") != SCHEMA:
        return None
    stages = content.get("stages")
    if not isinstance(stages, dict):
        return None
    start, made, program = (str(content.get(key)) for key in ("start", "made", "version"))
    records = {name: _record(item) for name, item in stages.items()}
    known = {name: record for name, record in records.items() if record is not None}
    return NightState(start, made, program, known)


def _record(content: Any) -> StageRecord | None:
    """A record from plain values, whatever somebody has made of the file."""
    if not isinstance(content, dict):
        return None
    try:
        files = {_inside(name): str(sha) for name, sha in content["files"].items()}
        found = dict(content["found"])
        seconds = float(content["seconds"])
        return StageRecord(str(content["fingerprint"]), str(content["made"]), seconds, files, found)
    except (KeyError, TypeError, ValueError, AttributeError):
        return None


def _inside(name: str) -> str:
    path = PurePosixPath(name)
    if path.is_absolute() or ".." in path.parts:
        raise ValueError(name)
    return name


def read_sealed(path: Path) -> dict[str, Any] | None:
    """Plain values as `write_sealed` wrote them; None where there are none, or damaged ones."""
    try:
        content = json.loads(path.read_text(encoding="utf-8"))
    except (OSError, ValueError):
        return None
    if not isinstance(content, dict):
        return None
    digest = content.pop(_DIGEST, None)
    return content if digest == fingerprint(content) else None
