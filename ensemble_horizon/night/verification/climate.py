"""The climatology that skill and anomaly correlation are held against."""

from __future__ import annotations

import logging

import numpy as np

from ensemble_horizon.errors import InputError
from ensemble_horizon.night.variables import Variable
from ensemble_horizon.night.verification.sources import run_scale
from ensemble_horizon.runs import Catalogue, open_field
from ensemble_horizon.settings import Settings

log = logging.getLogger(__name__)


def climatological_mean(
    settings: Settings, runs: Catalogue, variable: Variable
) -> np.ndarray | None:
    """Climatological mean (P,) in the units of the runs; None where none is named.

    Raises
    ------
    InputError
        if it is not on the grid of the runs, or in other units.
    """
    table = settings.climatology
    if table is None or (table.mean_file is None and variable.name not in table.mean_names):
        return None
    default = settings.variables[variable.name].source or variable.name
    source = table.mean_names.get(variable.name, default)
    file = table.mean_file or table.file
    field = open_field(settings.path(file), source, runs.grid)
    what = f"climatological mean {source!r} in {file}"
    own = field.attrs.get("units")
    scale, offset = run_scale(runs, variable.parts[0], None if own is None else str(own), what)
    if not np.isfinite(field.values).any():
        raise InputError(
            what, expected="values", found="none at all", remedy="name another variable or file"
        )
    size = int(np.prod(runs.grid.shape, dtype=int))
    return np.broadcast_to(field.values.ravel() * scale + offset, (size,)).astype(float)


def usable_deviation(variable: Variable, mean: np.ndarray | None) -> np.ndarray | None:
    """Climatological standard deviation (P,) in the units of the runs, where a mean is there, too.

    Raises
    ------
    InputError
        if it is zero everywhere: no forecast could be better than such a climatology.
    """
    if mean is None or variable.climatology is None:
        return None
    positive = variable.climatology > 0
    if not positive.any():
        raise InputError(
            f"climatology of {variable.name}",
            expected="a standard deviation above zero somewhere",
            found="zero, or nothing, at every point",
            remedy="put the standard deviation of a long record there, or take climatology.mean_"
            "names out of the settings",
        )
    if not positive.all():
        share = 1 - positive.mean()
        log.warning(
            "climatology of %s: no spread at %.1f %% of the points, left out of all its scores",
            variable.name, 100 * share,
        )  # fmt: skip
    return np.where(positive, variable.climatology, np.nan) / variable.factor


def only_where(mean: np.ndarray | None, deviation: np.ndarray | None) -> np.ndarray | None:
    """The mean where the deviation is known: points without are left out of every score."""
    if mean is None or deviation is None:
        return mean
    return np.where(np.isfinite(deviation), mean, np.nan)
