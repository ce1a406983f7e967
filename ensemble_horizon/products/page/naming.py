"""Names of variables as a page tells them: apart from each other, and alike in their capitals."""

from __future__ import annotations

from collections import Counter
from collections.abc import Sequence
from dataclasses import replace
from typing import NamedTuple

import xarray as xr

from ensemble_horizon.products.page.briefing import Briefing


def told_apart(briefing: Briefing) -> Briefing:
    """Return the briefing with names that can be told apart, and that begin alike.

    The name of the settings stands behind each long name that two variables share. Where some begin
    with a capital and others do not, all do.
    """
    curves = [result.curves for result in briefing.results]
    names = [str(item.attrs.get("long_name", "")) for item in curves]
    shared = Counter(names)
    told = _alike([_apart(*pair, shared) for pair in zip(curves, names, strict=True)])
    if told == names:
        return briefing
    results = tuple(
        _Named(
            result.curves.assign_attrs(long_name=name),
            None if result.maps is None else result.maps.assign_attrs(long_name=name),
        )
        for result, name in zip(briefing.results, told, strict=True)
    )
    known = dict(zip((str(item.attrs.get("variable")) for item in curves), told, strict=True))
    skill = tuple(
        replace(item, long_name=known.get(item.variable, item.long_name)) for item in briefing.skill
    )
    return replace(briefing, results=results, skill=skill)


class _Named(NamedTuple):
    curves: xr.Dataset
    maps: xr.Dataset | None


def _apart(curves: xr.Dataset, name: str, shared: Counter[str]) -> str:
    if shared[name] == 1:
        return name
    return f"{name} ({curves.attrs.get('variable', 'variable')})".strip()


def _alike(names: Sequence[str]) -> list[str]:
    letters = [name[0] for name in names if name[:1].isalpha()]
    if not any(letter.isupper() for letter in letters):
        return list(names)
    # A first word with a capital inside, such as pH, is a symbol and stays.
    return [
        name[0].upper() + name[1:] if name and name.split()[0].islower() else name for name in names
    ]
