"""Finding the files: paths, globs and templates."""

from __future__ import annotations

import glob
import os
from collections.abc import Iterable
from dataclasses import dataclass, field
from pathlib import Path
from typing import TypeAlias

from ensemble_horizon.errors import InputError
from ensemble_horizon.runs.templates import NameParts, is_template, parse_template


@dataclass(frozen=True)
class FoundFile:
    """One file, and what its name says."""

    path: str
    parts: NameParts = field(default_factory=NameParts)


Files: TypeAlias = str | os.PathLike[str] | Iterable[str | os.PathLike[str] | FoundFile]


def find_files(files: Files) -> tuple[FoundFile, ...]:
    """Find the files that ``files`` names, in the order of their names.

    Parameters
    ----------
    files : str, path, or iterable of them
        Each a path, a glob (``*``, ``?``, ``[]``, ``**``) or a template (see
        `ensemble_horizon.runs.templates.parse_template`); or a file that was found before.

    Raises
    ------
    InputError
        If a glob or template matches nothing, a path is a directory, or nothing is named. A path
        that does not exist is passed on: the reader reports it among the other broken files.
    ArgumentError
        If a template cannot be parsed.
    """
    entries = [files] if isinstance(files, str | os.PathLike) else list(files)
    found: dict[str, FoundFile] = {}
    for entry in entries:
        for item in [entry] if isinstance(entry, FoundFile) else _expand(os.fspath(entry)):
            found.setdefault(item.path, item)
    if not found:
        raise InputError(
            "files",
            expected="at least one NetCDF file",
            found="an empty list",
            remedy="give paths, a glob or a template",
        )
    return tuple(found[path] for path in sorted(found))


def _expand(text: str) -> list[FoundFile]:
    if Path(text).is_dir():
        raise InputError(
            text,
            expected="NetCDF files",
            found="a directory",
            remedy=f"name the files in it, for instance {text.rstrip('/')}/*.nc",
        )
    if Path(text).exists():
        return [FoundFile(text)]
    if is_template(text):
        return _expand_template(text)
    if glob.has_magic(text):
        names = _glob(text)
        if not names:
            raise InputError(
                f"glob {text!r}",
                expected="at least one file that matches",
                found=_nearby(text),
                remedy="correct the glob or the folder",
            )
        return [FoundFile(name) for name in names]
    return [FoundFile(text)]


def _expand_template(text: str) -> list[FoundFile]:
    template = parse_template(text)
    found = []
    for name in _glob(template.pattern):
        parts = template.match(name)
        if parts is not None:
            found.append(FoundFile(name, parts))
    if not found:
        raise InputError(
            f"template {text!r}",
            expected="at least one file whose name fits",
            found=_nearby(template.pattern),
            remedy="compare the template with the names of the files",
        )
    return found


def _glob(pattern: str) -> list[str]:
    """Names that match; folders only where the pattern asks for a suffix, so that nobody took
    them for anything but files: the reader reports those.
    """
    # The names must stay spelt as the pattern spells them, which Path.glob does not promise.
    names = glob.glob(pattern, recursive=True)  # noqa: PTH207
    if Path(pattern).suffix:
        return names
    return [name for name in names if not Path(name).is_dir()]


def _nearby(pattern: str) -> str:
    """Say how far down the pattern still exists, which is where the reader must look."""
    folder = Path(pattern).parent
    while glob.has_magic(str(folder)):
        folder = folder.parent
    if not folder.is_dir():
        return f"no match, and no folder {str(folder)!r}"
    names = sorted(path.name for path in folder.iterdir())
    if not names:
        return f"no match; the folder {str(folder)!r} is empty"
    listed = ", ".join(names[:3]) + (", ..." if len(names) > 3 else "")
    return f"no match among {len(names)} names in {str(folder)!r} ({listed})"
