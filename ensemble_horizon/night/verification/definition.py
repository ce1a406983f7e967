"""What sums of scores depend on, as fingerprints: only equal ones may be used together."""

from __future__ import annotations

import dataclasses
import hashlib
import json
from pathlib import Path
from typing import Any

import numpy as np

from ensemble_horizon.errors import InputError
from ensemble_horizon.products.score_sums import FORMAT
from ensemble_horizon.runs import Catalogue
from ensemble_horizon.settings import Settings
from ensemble_horizon.skill.quantities import QUANTITIES

# What a fingerprint is made of, and what it is called where it differs.
_PARTS = {
    "format": "by another version of the program",
    "variable": "with another source, level, plausible range or other units of the variable",
    "members": "with other members or other rules for them",
    "places": "with other places",
    "analyses": "with another name in the analyses, or without analyses",
    "observations": "with other observations",
    "climatology": "with another climatology",
}
_OF_VARIABLE = {"speed", "position", "units", "plausible", "level"}
# Degrees and kilometres to this many decimals: coordinates in single precision differ by less.
_DECIMALS = 3
_LENGTH = 32  # characters of the digest of each part


def settings_fingerprint(settings: Settings, name: str) -> str:
    """Digests of all settings that the sums of a variable depend on, as one text.

    The members and the rules for them, the variable and its units, the places, the names in the
    analyses and observations, the climatology (the content of its files, too), and the format of
    the sums. Criteria, labels and what a score must stay above make no difference to them, nor do
    the places of files: runs, analyses and observations may move.

    Raises
    ------
    InputError
        if the file of the climatology cannot be read.
    """
    table = settings.variables[name]
    analyses = settings.analyses
    observed = settings.observations.get(name)
    content = {
        "format": [FORMAT, QUANTITIES],
        "variable": [name, table.sources(name), table.model_dump(include=_OF_VARIABLE)],
        "members": settings.runs.model_dump(exclude={"starts", "files"}),
        "places": [[dataclasses.asdict(item) for item in kind] for kind in settings.places()],
        "analyses": None if analyses is None else [analyses.names.get(name)],
        "observations": None if observed is None else observed.model_dump(exclude={"file"}),
        "climatology": _climatology(settings, name),
    }
    return " ".join(f"{part}:{_digest(content[part])[:_LENGTH]}" for part in _PARTS)


def what_differs(one: str, other: str) -> str:
    """In what two fingerprints of settings differ, in words after "verified".

    Examples
    --------
    >>> what_differs("places:0a climatology:1b", "places:0a climatology:2c")
    'with another climatology'
    >>> what_differs("places:0a climatology:1b", "something older")
    'by other settings'
    """
    before, now = (dict(part.partition(":")[::2] for part in text.split()) for text in (one, other))
    found = [words for part, words in _PARTS.items() if before.get(part) != now.get(part)]
    return " and ".join(found) if set(before) == set(now) and found else "by other settings"


def ground_fingerprint(runs: Catalogue, parts: tuple[str, ...]) -> str:
    """SHA-256 of the grid of the runs and of the units of a variable in them."""
    grid = runs.grid
    points = {}
    for name in sorted(grid.coords):
        values = np.round(grid.coords[name].values.astype(float), _DECIMALS) + 0.0
        points[name] = hashlib.sha256(values.tobytes()).hexdigest()
    units = [runs.variables[part].units or "" for part in parts]
    content = [grid.kind, grid.dims, grid.shape, points, units, runs.lead_units, runs.calendar]
    return _digest(content)


def _climatology(settings: Settings, name: str) -> list[Any] | None:
    """Names and content of the climatology, where scores are held against it."""
    table = settings.climatology
    if table is None or (table.mean_file is None and name not in table.mean_names):
        return None
    mean = None if table.mean_file is None else _file_digest(settings, table.mean_file)
    names = [table.names.get(name), table.mean_names.get(name)]
    return [*names, _file_digest(settings, table.file), mean]


def _digest(content: Any) -> str:
    return hashlib.sha256(json.dumps(content, sort_keys=True).encode()).hexdigest()


def _file_digest(settings: Settings, file: str) -> str:
    path: Path = settings.path(file)
    try:
        with path.open("rb") as stream:
            return hashlib.file_digest(stream, "sha256").hexdigest()
    except OSError as error:
        raise InputError(
            str(path),
            expected="a climatology that can be read",
            found=error.strerror or type(error).__name__,
            remedy="check climatology.file and climatology.mean_file",
        ) from error
