"""Two versions of a model on the same starts: estimated, compared, and written."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from importlib.metadata import version
from pathlib import Path

import numpy as np
import xarray as xr

from ensemble_horizon.errors import ProductError
from ensemble_horizon.night.comparison.common import CommonGround, common_ground
from ensemble_horizon.night.comparison.factors import (
    SharedNoise,
    calibrated_version,
    factor_noise,
)
from ensemble_horizon.night.comparison.gaps import note_faults
from ensemble_horizon.night.comparison.judging import judge_together
from ensemble_horizon.night.comparison.members import members_used, note_members
from ensemble_horizon.night.comparison.named import Notes
from ensemble_horizon.night.comparison.scores import score_differences
from ensemble_horizon.night.estimate import Progress, estimate_input, silent
from ensemble_horizon.night.results import VariableResult, without_pooled
from ensemble_horizon.night.waiting import shares_of
from ensemble_horizon.night.writing import drawn_by, map_ground
from ensemble_horizon.products import write_versions
from ensemble_horizon.settings import Settings
from ensemble_horizon.versions import compare_horizons, false_discovery
from ensemble_horizon.vocabulary import CRITERION, START, Status

_COLUMNS = 4096
_ON_MAPS = ("gained", "gained_low", "gained_high", "p_value", "starts", "reason")
_OF_SPREAD = (
    "limits rest on the spread of the members, not on errors: a version whose members part too "
    "slowly gains hours that it does not deserve, so hold both against analyses before you trust it"
)


@dataclass(frozen=True)
class VersionsResult:
    """What the comparison of one variable found.

    Parameters
    ----------
    places : Dataset (place, criterion), see `compare_horizons`; with ``adjusted_p_value`` and
        ``survives`` over all rows of all variables
    maps : the same (criterion, *space), judged over each map; None without maps
    shares : time to the limit under both versions, see `time_to_limit`
    """

    places: xr.Dataset
    maps: xr.Dataset | None
    shares: tuple[xr.Dataset, xr.Dataset]


@dataclass(frozen=True)
class Comparison:
    """Two versions compared.

    labels : names of the versions
    starts : the common starts
    results : one per variable, in the order of the first settings
    scores : differences of scores, one per variable, where both versions can be verified
    notes : what is not common, and what to keep in mind
    inputs : the files read
    settings : the first settings, cut down to what is common
    """

    labels: tuple[str, str]
    starts: list[str]
    results: list[VersionsResult]
    scores: list[xr.Dataset]
    notes: Notes
    inputs: list[str]
    settings: Settings


def compare(
    settings: tuple[Settings, Settings], labels: tuple[str, str], progress: Progress = silent
) -> Comparison:
    """Estimate both versions on the starts that both have, and compare their limits.

    Parameters
    ----------
    settings : of both versions, the one in use first
    labels : names of the versions
    progress : callable
        As in `estimate`.

    Raises
    ------
    SettingsError
        if no variable, criterion or place is common.
    InputError
        if fewer than two starts are common, or the files cannot be used, and why.
    """
    ground = common_ground(settings, labels, progress)
    results = [_variable(ground, name, progress) for name in ground.criteria]
    judge_together([result.places for result in results])
    scores = score_differences(ground, float(results[0].places.attrs["confidence"]), progress)
    judge_together(scores)
    for label, faults in zip(labels, ground.faults, strict=True):
        note_faults(label, faults, ground.starts, ground.notes)
    ground.notes.cautions.append(_caution_of_spread(ground))
    inputs = [path for found in ground.found for path in found.catalogue.paths]
    return Comparison(
        labels, ground.starts, results, scores, ground.notes, inputs, ground.settings[0]
    )


def compare_and_write(
    settings: tuple[Settings, Settings],
    labels: tuple[str, str],
    folder: Path,
    progress: Progress = silent,
) -> tuple[Comparison, list[Path]]:
    """Compare, and write all products to ``folder``.

    Raises
    ------
    InputError, SettingsError
        as `compare`.
    ProductError
        if the folder cannot be written, or is that of the products of a version.
    """
    for label, item in zip(labels, settings, strict=True):
        if item.path(item.products.folder).resolve() == folder.resolve():
            raise ProductError(
                str(folder),
                expected="a folder of its own for the comparison",
                found=f"the folder of the products of {label}",
                remedy="name another with --folder",
            )
    found = compare(settings, labels, progress)
    workers = [item.engine.workers for item in settings if item.engine.workers is not None]
    paths = write_versions(
        folder,
        found.results,
        {
            "inputs": found.inputs,
            "settings": "\n".join(item.text for item in settings),
            "version": version("ensemble-horizon"),
            "title": f"{labels[1]} against {labels[0]}",
            "command": "ensemble-horizon compare",
        },
        scores=found.scores,
        notes={"Not compared": found.notes.left_out, "Cautions": found.notes.cautions},
        figures=all(item.products.figures for item in settings),
        ground=map_ground(found.settings),
        draw=drawn_by(max(workers, default=None), progress),
    )
    return found, paths


def _variable(ground: CommonGround, name: str, progress: Progress) -> VersionsResult:
    """Both versions of one variable, one after the other; only limits are kept of each."""
    found: list[VariableResult] = []
    used = []
    for number, settings in enumerate(ground.of(name)):
        label, input_ = ground.labels[number], ground.found[number]

        def told(stage: str, done: float, total: float, label: str = label) -> None:
            progress(f"{stage} {name} of {label}", done, total)

        estimate = estimate_input(settings, input_, ground.plan, told)
        found.append(estimate.results[0])
        faults = estimate.faults[len(input_.faults) :]
        ground.faults[number].extend(faults)
        sources = settings.variables[name].sources(name)
        used.append(members_used(settings, input_, sources, faults))
    note_members(name, (used[0], used[1]), ground.labels, ground.notes)
    a, b = (_limits(result, ground.criteria[name], ground.first_lead) for result in found)
    confidence = float(a.attrs["confidence"])
    ends = (float(a.attrs["last_lead"]), float(b.attrs["last_lead"]))
    first = ground.first_lead
    noise = _noise_of_factors(ground, name, found, (first, min(ends)))
    places = compare_horizons(
        a, b, last_lead=ends, first_lead=first, confidence=confidence,
        shared_variance=None if noise is None else noise.variance,
        shared_dof=np.inf if noise is None else noise.dof,
    )  # fmt: skip
    about = {
        **{key: a.attrs[key] for key in ("variable", "long_name", "units", "confidence")},
        "lead_units": a.attrs["lead_units"],
        "restricted_to": float(places["restricted_to"]),
        "version_a": ground.labels[0],
        "version_b": ground.labels[1],
        "start_count": len(ground.starts),
        "first_start": ground.starts[0],
        "last_start": ground.starts[-1],
    }
    shares = tuple(shares_of(item, first).assign_attrs(about) for item in (a, b))
    maps = None
    if ground.plan.mode != "none":
        maps = _maps(found, ground, name, ends, confidence).assign_attrs(about)
    return VersionsResult(places.assign_attrs(about), maps, (shares[0], shares[1]))


def _noise_of_factors(
    ground: CommonGround,
    name: str,
    found: Sequence[VariableResult],
    span: tuple[float, float],
) -> SharedNoise | None:
    """What the factors of the calibrations add to the noise of the gains of one variable."""
    versions = [
        calibrated_version(
            settings,
            input_.catalogue,
            name,
            without_pooled(result.curves).sel({CRITERION: ground.criteria[name]}),
        )
        for settings, input_, result in zip(ground.settings, ground.found, found, strict=True)
    ]
    return factor_noise(versions, span)


def _caution_of_spread(ground: CommonGround) -> str:
    """What the limits of both versions rest on."""
    files = [item.calibration and item.path(item.calibration.file) for item in ground.settings]
    if all(files):
        return (
            "limits rest on spread calibrated by past errors of each version; the uncertainty of "
            "the factors is in the intervals of the gains at regions and sites, not on maps, and "
            "rather too wide where both were found from the same past starts"
        )
    if any(files):
        one = ground.labels[0 if files[0] else 1]
        return f"only the spread of {one} is calibrated, so the limits are not of one kind"
    return _OF_SPREAD


def _limits(result: VariableResult, criteria: Sequence[str], first: float) -> xr.Dataset:
    """Limits (start, place, criterion) of the single starts, counted from the first lead on."""
    curves = without_pooled(result.curves)[["horizon", "status"]].sel({CRITERION: criteria})
    return _counted_from(curves, first)


def _counted_from(limits: xr.Dataset, first: float) -> xr.Dataset:
    """What the runs of one version show before those of the other begin counts as at the start."""
    early = (limits["status"] == Status.reached) & (limits["horizon"] <= first)
    status = limits["status"].where(~early, Status.at_start).astype(np.int8)
    return limits.assign(status=status)


def _maps(
    found: Sequence[VariableResult],
    ground: CommonGround,
    name: str,
    ends: tuple[float, float],
    confidence: float,
) -> xr.Dataset:
    """Hours gained at every grid point, some points at a time, so that memory stays flat."""
    first, second = (result.maps for result in found)
    assert first is not None
    assert second is not None
    a, b = (item.sel({CRITERION: ground.criteria[name]}) for item in (first, second))
    dims = [str(dim) for dim in a["horizon"].dims if dim not in (START, CRITERION)]
    shape = tuple(a.sizes[dim] for dim in dims)
    size = int(np.prod(shape))
    fields: dict[str, np.ndarray] = {}
    attributes: dict[str, dict[str, object]] = {}
    for row in range(a.sizes[CRITERION]):
        for begin in range(0, size, _COLUMNS):
            part = slice(begin, min(begin + _COLUMNS, size))
            pair = [_counted_from(_points(item, row, part), ground.first_lead) for item in (a, b)]
            gained = compare_horizons(
                pair[0], pair[1], last_lead=ends, first_lead=ground.first_lead,
                confidence=confidence,
            )  # fmt: skip
            for key in _ON_MAPS:
                values = gained[key].values
                kind = np.float32 if values.dtype.kind == "f" else np.int16
                if key not in fields:
                    fields[key] = np.empty((a.sizes[CRITERION], size), dtype=kind)
                    attributes[key] = dict(gained[key].attrs)
                fields[key][row, part] = values
    maps = xr.Dataset(
        {
            key: ((CRITERION, *dims), values.reshape(-1, *shape), attributes[key])
            for key, values in fields.items()
        },
        coords={key: coord for key, coord in a.coords.items() if START not in coord.dims},
    )
    judged = false_discovery(maps["p_value"], dim=dims)
    return maps.assign(adjusted_p_value=judged["adjusted"], survives=judged["significant"])


def _points(maps: xr.Dataset, row: int, part: slice) -> xr.Dataset:
    """Limits (start, point) of one criterion at some points."""
    starts = maps.sizes[START]
    flat = {
        key: maps[key].transpose(START, CRITERION, ...).values[:, row].reshape(starts, -1)[:, part]
        for key in ("horizon", "status")
    }
    units = maps["horizon"].attrs
    return xr.Dataset(
        {
            "horizon": ((START, "point"), flat["horizon"], units),
            "status": ((START, "point"), flat["status"]),
        },
        coords={START: maps[START].values},
    )
