"""Choosing one level of a variable that has several."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from typing import TypeAlias

import numpy as np

from ensemble_horizon.errors import InputError
from ensemble_horizon.runs.decoding import StoredVariable

Level: TypeAlias = float | Mapping[str, float] | None


def select_level(
    path: str,
    names: Sequence[str],
    dim: str,
    size: int,
    coordinate: StoredVariable | None,
    level: Level,
) -> int:
    """Index along ``dim`` of the level that was asked for by value.

    Raises
    ------
    InputError
        If there are several levels and none was asked for, or none has the value; the message
        lists the values.
    """
    wanted = level.get(names[0]) if isinstance(level, Mapping) else level
    values = np.arange(size, dtype=float) if coordinate is None else np.asarray(coordinate[...])
    units = "" if coordinate is None else str(getattr(coordinate, "units", ""))
    if wanted is None:
        if size == 1:
            return 0
        raise InputError(
            path,
            expected=f"one level of {', '.join(map(repr, names))}",
            found=f"{size} levels along {dim!r}: {_listed(values, units)}",
            remedy=f"choose one by value, for instance level={values[0]:g}",
        )
    near = np.flatnonzero(np.isclose(values.astype(float), float(wanted), rtol=1e-5, atol=1e-9))
    if near.size == 0:
        raise InputError(
            path,
            expected=f"the level {float(wanted):g} along {dim!r}",
            found=f"the levels {_listed(values, units)}",
            remedy="choose one of those listed, in their units",
        )
    return int(near[0])


def refuse_other_level(
    path: str, names: Sequence[str], alone: Sequence[StoredVariable], level: Level
) -> None:
    """Refuse a level asked by name of a variable without levels, unless it is the one there.

    A level asked of all variables at once concerns only those that have some.

    Parameters
    ----------
    alone : sequence
        Scalar level coordinates of the file.

    Raises
    ------
    InputError
        If a level was asked for and none of the scalar ones has the value.
    """
    wanted = level.get(names[0]) if isinstance(level, Mapping) else None
    if wanted is None:
        return
    values = np.array([float(np.asarray(item[...]).ravel()[0]) for item in alone])
    if values.size and np.isclose(values, float(wanted), rtol=1e-5, atol=1e-9).any():
        return
    raise InputError(
        path,
        expected=f"the level {float(wanted):g} of {', '.join(map(repr, names))}",
        found=f"one level only, {_listed(values, '')}" if values.size else "no levels at all",
        remedy="leave the level out, or name a variable that has it",
    )


def _listed(values: np.ndarray, units: str) -> str:
    texts = [f"{value:g}" for value in values[:20]]
    more = ", ..." if values.size > 20 else ""
    return ", ".join(texts) + more + (f" {units}" if units else "")
