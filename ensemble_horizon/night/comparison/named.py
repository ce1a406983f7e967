"""What two settings files both name, and what only one of them does."""

from __future__ import annotations

from collections.abc import Collection, Sequence
from dataclasses import dataclass, field

from ensemble_horizon.errors import SettingsError
from ensemble_horizon.settings import Settings
from ensemble_horizon.spread import Region, Site


@dataclass
class Notes:
    """What the reader of a comparison has to know.

    left_out : what only one version has, or both have but not alike
    cautions : what to keep in mind with what is compared
    """

    left_out: list[str] = field(default_factory=list)
    cautions: list[str] = field(default_factory=list)


def named_in_both(
    settings: tuple[Settings, Settings], labels: tuple[str, str], notes: Notes
) -> tuple[Settings, Settings]:
    """Settings with the places and variables that both name; what only one names is noted.

    Raises
    ------
    SettingsError
        if no variable, or no place, is named in both.
    """
    a, b = settings
    variables = shared_names("variable", a.variables, b.variables, labels, notes)
    (regions_a, sites_a), (regions_b, sites_b) = a.places(), b.places()
    regions = _same("region", _by_name(regions_a), _by_name(regions_b), labels, notes)
    sites = _same("site", _by_name(sites_a), _by_name(sites_b), labels, notes)
    if not regions and not sites:
        named = [
            f"{label}: {', '.join(item.name for items in part.places() for item in items)}"
            for label, part in zip(labels, settings, strict=True)
        ]
        raise nothing_shared("regions or sites", labels, "; ".join(named))
    cut = tuple(
        item.model_copy(
            update={
                "variables": {name: item.variables[name] for name in variables},
                "regions": {n: item.regions[n] for n in regions if n in item.regions},
                "sites": {name: item.sites[name] for name in sites},
            }
        )
        for item in settings
    )
    if not variables:
        raise nothing_shared(
            "variables", labels,
            "; ".join(
                f"{label}: {', '.join(item.variables)}"
                for label, item in zip(labels, settings, strict=True)
            ),
        )  # fmt: skip
    return cut[0], cut[1]


def _by_name(places: Sequence[Region] | Sequence[Site]) -> dict[str, Region | Site]:
    return {item.name: item for item in places}


def _same(
    kind: str,
    a: dict[str, Region | Site],
    b: dict[str, Region | Site],
    labels: tuple[str, str],
    notes: Notes,
) -> list[str]:
    """Names of places that lie alike in both."""
    shared = shared_names(kind, a, b, labels, notes)
    notes.left_out += [
        f"{kind} {name}: it does not lie in the same place in both"
        for name in shared
        if a[name] != b[name]
    ]
    return [name for name in shared if a[name] == b[name]]


def shared_names(
    kind: str, a: Collection[str], b: Collection[str], labels: tuple[str, str], notes: Notes
) -> list[str]:
    """Names that both have, in the order of the first; the others are noted."""
    for label, own, other in zip(labels, (a, b), (b, a), strict=True):
        notes.left_out += [f"{kind} {name}: only in {label}" for name in own if name not in other]
    return [name for name in a if name in b]


def nothing_shared(what: str, labels: tuple[str, str], found: str) -> SettingsError:
    """The error for two versions that have nothing of a kind in common."""
    return SettingsError(
        f"settings of {labels[0]} and {labels[1]}",
        expected=f"{what} that both name, and alike",
        found=found,
        remedy=f"name the same {what} in both settings files",
    )
