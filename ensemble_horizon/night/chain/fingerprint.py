"""Fingerprints: what a stage rests on, as one short text that changes when any of it does."""

from __future__ import annotations

import hashlib
import json
from collections.abc import Iterable, Mapping, Sequence
from pathlib import Path
from typing import Any, NamedTuple


class Mark(NamedTuple):
    """By what a file is known again without reading it; times in nanoseconds.

    ``changed`` is the time of the last change of the entry itself, which nobody can set back. It
    counts only while a run reads the file: a copy of an archive has other ones.
    """

    size: int
    modified: int
    inode: int
    changed: int


Marks = Mapping[str, Mark | None]


def marks_of(paths: Iterable[str | Path]) -> dict[str, Mark | None]:
    """Marks by path, None where there is no file.

    Examples
    --------
    >>> marks_of(["no/such/file.nc"])
    {'no/such/file.nc': None}
    """
    return {str(path): _mark(Path(path)) for path in paths}


def changed_files(before: Marks, after: Marks) -> list[str]:
    """Paths whose marks differ.

    Examples
    --------
    >>> changed_files({"a": None, "b": Mark(1, 2, 3, 4)}, {"a": None, "b": Mark(1, 2, 3, 5)})
    ['b']
    """
    return [path for path, mark in before.items() if after.get(path) != mark]


def lasting(marks: Marks) -> dict[str, list[int] | None]:
    """What of the marks outlives a run: size, time of modification and inode.

    Examples
    --------
    >>> lasting({"a.nc": Mark(1, 2, 3, 4)})
    {'a.nc': [1, 2, 3]}
    """
    return {path: None if mark is None else list(mark[:3]) for path, mark in marks.items()}


def fingerprint(content: Any) -> str:
    """SHA-256 of the canonical JSON of plain values: keys sorted, no blanks.

    Examples
    --------
    >>> fingerprint({"a": 1, "b": [2.5, None]}) == fingerprint({"b": [2.5, None], "a": 1})
    True
    """
    return hashlib.sha256(canonical(content).encode()).hexdigest()


def canonical(content: Any) -> str:
    """Plain values as JSON in one way only.

    Examples
    --------
    >>> canonical({"b": 1, "a": ["x"]})
    '{"a":["x"],"b":1}'
    """
    return json.dumps(content, sort_keys=True, separators=(",", ":"), ensure_ascii=False)


def digest_of(path: Path) -> str:
    """SHA-256 of a file."""
    with path.open("rb") as stream:
        return hashlib.file_digest(stream, "sha256").hexdigest()


def part_of(table: Mapping[str, Any], keys: Sequence[str]) -> dict[str, Any]:
    """The part of nested tables that some keys name.

    Parameters
    ----------
    keys : sequence of str
        Such as ``"runs.members"`` or ``"variables.*.source"``; ``*`` stands for any name.

    Examples
    --------
    >>> part_of({"title": "x", "runs": {"members": 3, "files": "a"}}, ["runs.members"])
    {'runs': {'members': 3}}
    """
    found: dict[str, Any] = {}
    for key in keys:
        _take(table, key.split("."), found)
    return found


def _take(table: Mapping[str, Any], path: Sequence[str], into: dict[str, Any]) -> None:
    head, *rest = path
    for name in table if head == "*" else [head]:
        value = table.get(name)
        if not rest:
            into[name] = value
        elif isinstance(value, Mapping):
            _take(value, rest, into.setdefault(name, {}))


def _mark(path: Path) -> Mark | None:
    try:
        status = path.stat()
    except OSError:
        return None
    return Mark(status.st_size, status.st_mtime_ns, status.st_ino, status.st_ctime_ns)
