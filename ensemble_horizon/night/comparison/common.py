"""What two versions have in common: places, variables, criteria, starts, leads and grid."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from ensemble_horizon.errors import InputError
from ensemble_horizon.night.comparison.members import note_sizes
from ensemble_horizon.night.comparison.named import (
    Notes,
    named_in_both,
    nothing_shared,
    shared_names,
)
from ensemble_horizon.night.estimate import Progress
from ensemble_horizon.night.input import Input, open_input
from ensemble_horizon.night.mapping import MapPlan, map_plan
from ensemble_horizon.night.variables import Variable, resolve_variable
from ensemble_horizon.runs import Catalogue, Fault
from ensemble_horizon.runs.units import same_units
from ensemble_horizon.serial.mean import LEAST_STARTS
from ensemble_horizon.settings import Settings

_TOLD = 6  # starts named one by one


@dataclass(frozen=True)
class CommonGround:
    """Two versions cut down to what both have.

    Parameters
    ----------
    labels : names of the versions
    settings : with common variables and places only
    found : input at the common starts
    criteria : labels of the common criteria of each variable
    first_lead : float, the later first lead of the two
    plan : MapPlan, of both
    notes : Notes
    faults : of both, those of the headers first
    """

    labels: tuple[str, str]
    settings: tuple[Settings, Settings]
    found: tuple[Input, Input]
    criteria: dict[str, list[str]]
    first_lead: float
    plan: MapPlan
    notes: Notes
    faults: tuple[list[Fault], list[Fault]]

    @property
    def starts(self) -> list[str]:
        """The common starts, in order of time."""
        catalogue = self.found[0].catalogue
        return [catalogue.start_label(number) for number in range(catalogue.starts.size)]

    def of(self, variable: str) -> tuple[Settings, Settings]:
        """The settings of both with one variable only."""
        first, second = (
            item.model_copy(update={"variables": {variable: item.variables[variable]}})
            for item in self.settings
        )
        return first, second


def common_ground(
    settings: tuple[Settings, Settings],
    labels: tuple[str, str],
    progress: Progress,
) -> CommonGround:
    """Read the headers of both versions and keep what they share.

    Raises
    ------
    SettingsError
        if no variable, criterion or place is common.
    InputError
        if fewer than two starts, or no leads, are common, or calendars or lead units differ.
    """
    notes = Notes()
    settings = named_in_both(settings, labels, notes)
    first, second = (
        _headers(item, label, progress) for item, label in zip(settings, labels, strict=True)
    )
    catalogues = (first.catalogue, second.catalogue)
    starts = _starts(catalogues, settings, labels, notes)
    first_lead = _leads(catalogues, labels, notes)
    criteria = _criteria(settings, catalogues, labels, notes)
    plan = _map_plan(settings, catalogues, labels, notes)
    note_sizes((first, second), labels, notes)
    _caution_of_confidence(settings, labels, notes)
    kept = tuple(
        item.model_copy(update={"variables": {name: item.variables[name] for name in criteria}})
        for item in settings
    )
    return CommonGround(
        labels, (kept[0], kept[1]), (first.at(starts), second.at(starts)), criteria,
        first_lead, plan, notes, (list(first.faults), list(second.faults)),
    )  # fmt: skip


def _headers(settings: Settings, label: str, progress: Progress) -> Input:
    return open_input(settings, lambda done, of: progress(f"headers of {label}", done, of))


def _starts(
    catalogues: tuple[Catalogue, Catalogue],
    settings: tuple[Settings, Settings],
    labels: tuple[str, str],
    notes: Notes,
) -> list[str]:
    calendars = [
        "standard" if item.starts.dtype.kind == "M" else item.calendar for item in catalogues
    ]
    if calendars[0] != calendars[1]:
        raise InputError(
            f"starts of {labels[0]} and {labels[1]}",
            expected="one calendar",
            found=f"{calendars[0]} and {calendars[1]}",
            remedy="compare versions that run on the same calendar",
        )
    starts = [
        [item.start_label(number) for number in range(item.starts.size)] for item in catalogues
    ]
    common = [start for start in starts[0] if start in set(starts[1])]
    if len(common) < 2:
        told = "; ".join(
            f"{label}: {len(own)} from {own[0]} to {own[-1]}"
            for label, own in zip(labels, starts, strict=True)
        )
        latest = any(item.runs.starts == "latest" for item in settings)
        raise InputError(
            f"starts of {labels[0]} and {labels[1]}",
            expected="at least two starts that both have",
            found=f"{len(common) or 'none'} ({told})",
            remedy='set runs.starts = "all"' if latest else "add runs of both from the same starts",
        )
    for label, own in zip(labels, starts, strict=True):
        only = [start for start in own if start not in set(common)]
        if only:
            more = f" and {len(only) - _TOLD} more" if len(only) > _TOLD else ""
            notes.left_out.append(f"starts only in {label}: {', '.join(only[:_TOLD])}{more}")
    if len(common) < LEAST_STARTS:
        notes.cautions.append(
            f"{len(common)} common starts are too few for intervals and p-values, which are given "
            f"from {LEAST_STARTS} on: the hours gained are those of these starts, no more"
        )
    return common


def _leads(catalogues: tuple[Catalogue, Catalogue], labels: tuple[str, str], notes: Notes) -> float:
    """The later first lead."""
    units = [item.lead_units for item in catalogues]
    leads = [item.leads for item in catalogues]
    first, last = max(lead[0] for lead in leads), min(lead[-1] for lead in leads)
    told = "; ".join(
        f"{label}: {lead.size} leads from {lead[0]:g} to {lead[-1]:g} {unit}"
        for label, lead, unit in zip(labels, leads, units, strict=True)
    )
    if units[0] != units[1] or last <= first:
        raise InputError(
            f"leads of {labels[0]} and {labels[1]}",
            expected="a range of leads that both have, in the same units",
            found=told,
            remedy="compare runs over the same leads",
        )
    if leads[0][-1] != leads[1][-1] or leads[0][0] != leads[1][0]:
        notes.cautions.append(
            f"leads differ ({told}): horizons count from {first:g} to {last:g} {units[0]}"
        )
    within = [lead[(lead >= first) & (lead <= last)] for lead in leads]
    if not np.array_equal(within[0], within[1]):
        notes.cautions.append(
            f"leads are spaced differently ({told}), and a limit between two leads is interpolated"
        )
    return float(first)


def _criteria(
    settings: tuple[Settings, Settings],
    catalogues: tuple[Catalogue, Catalogue],
    labels: tuple[str, str],
    notes: Notes,
) -> dict[str, list[str]]:
    """Labels of the common criteria of each variable that has any."""
    found: dict[str, list[str]] = {}
    for name in settings[0].variables:
        a, b = (
            resolve_variable(item, catalogue, name)
            for item, catalogue in zip(settings, catalogues, strict=True)
        )
        if not same_units(a.units, b.units):
            notes.left_out.append(f"variable {name}: in {a.units!r} and in {b.units!r}")
            continue
        kinds = [_what_it_is(item, name) for item in settings]
        if kinds[0] != kinds[1]:
            notes.left_out.append(f"variable {name}: {' and '.join(kinds)}")
            continue
        if a.hold != b.hold:
            notes.left_out.append(f"variable {name}: hold {a.hold:g} and {b.hold:g}")
            continue
        shared = shared_names(f"criterion of {name}", a.criteria, b.criteria, labels, notes)
        alike = [label for label in shared if a.criteria[label] == b.criteria[label]]
        notes.left_out += [
            f"criterion of {name} {label}: not the same in both"
            for label in shared
            if label not in alike
        ]
        if alike:
            found[name] = alike
            kinds_used = {a.criteria[label].kind for label in alike}
            _caution_of_thresholds(settings, (a, b), kinds_used, notes)
    if not found:
        raise nothing_shared("criteria", labels, "; ".join(notes.left_out))
    return found


def _what_it_is(settings: Settings, name: str) -> str:
    """Kind and level of a variable in words; the names in the files may differ."""
    table = settings.variables[name]
    kind = "position" if table.position else "speed" if table.speed else "scalar"
    return kind if table.level is None else f"{kind} at level {table.level:g}"


def _caution_of_thresholds(
    settings: tuple[Settings, Settings],
    variables: tuple[Variable, Variable],
    kinds: set[str],
    notes: Notes,
) -> None:
    """Thresholds that rest on something that may differ between the versions."""
    name = variables[0].name
    if "saturation_fraction" in kinds:
        laws = [(item.growth.law, item.growth.scale) for item in settings]
        if laws[0] != laws[1]:
            notes.cautions.append(
                f"{name}: the laws of growth are fitted differently ({laws[0][0]}, {laws[0][1]}; "
                f"{laws[1][0]}, {laws[1][1]}), and with them the thresholds"
            )
    known = [item.climatology for item in variables if item.climatology is not None]
    if len(known) == 2 and not (
        known[0].shape == known[1].shape and np.allclose(known[0], known[1], equal_nan=True)
    ):
        notes.cautions.append(
            f"{name}: the climatologies differ, and with them the thresholds: part of the hours "
            "gained may come from there"
        )


def _caution_of_confidence(
    settings: tuple[Settings, Settings], labels: tuple[str, str], notes: Notes
) -> None:
    a, b = (item.growth.confidence for item in settings)
    if a != b:
        notes.cautions.append(
            f"intervals are given at {100 * a:g} %, as the settings of {labels[0]} ask; those of "
            f"{labels[1]} ask for {100 * b:g} %"
        )


def _map_plan(
    settings: tuple[Settings, Settings],
    catalogues: tuple[Catalogue, Catalogue],
    labels: tuple[str, str],
    notes: Notes,
) -> MapPlan:
    none = MapPlan("none")
    if any(map_plan(*pair).mode == "none" for pair in zip(settings, catalogues, strict=True)):
        return none
    difference = catalogues[0].grid.difference(catalogues[1].grid)
    if difference is None:
        return MapPlan("each", fields=("horizon", "status"))
    notes.left_out.append(
        f"maps: the grids differ ({labels[1]} has {difference}); regions and sites are compared"
    )
    if not any(item.regions or item.sites for item in settings):
        notes.cautions.append(
            "the domain is the whole grid of each version: if one covers more than the other, "
            "name a region that both cover"
        )
    return none
