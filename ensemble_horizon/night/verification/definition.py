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

_OF_VARIABLE = {"speed", "position", "units", "plausible", "level"}
# Degrees and kilometres to this many decimals: coordinates in single precision differ by less.
_DECIMALS = 3


def settings_fingerprint(settings: Settings, name: str) -> str:
    """SHA-256 of all settings that the sums of a variable depend on.

    The runs and their members, the variable and its units, the places, the analyses, observations
    and climatology (the content of its files, too), and the format of the sums. Criteria, labels
    and what a score must stay above make no difference to them.

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
        "runs": settings.runs.model_dump(exclude={"starts"}),
        "places": [[dataclasses.asdict(item) for item in kind] for kind in settings.places()],
        "analyses": None if analyses is None else [analyses.files, analyses.names.get(name)],
        "observations": None if observed is None else observed.model_dump(),
        "climatology": _climatology(settings, name),
    }
    return _digest(content)


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
