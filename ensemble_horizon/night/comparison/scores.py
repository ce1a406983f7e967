"""Scores of two versions, start by start against what came.

The mean of M members errs by more than that of very many: its squared error has an expected surplus
of s^2/M, s^2 being the variance between the members (Ferro 2014; Leutbecher 2019, both Quarterly
Journal of the Royal Meteorological Society, from memory). So that neither version gains by its
number of members, squared errors of both are those of the mean of as many members as the smaller
ensemble has: e^2 - s^2/M + s^2/m. The fair CRPS needs no such step. Both hold for members that are
alike and independent given the start; the mean of members perturbed in pairs of opposite sign errs
less than this supposes.
"""

from __future__ import annotations

from collections.abc import Sequence
from typing import NamedTuple

import numpy as np
import xarray as xr

from ensemble_horizon.night.comparison.common import CommonGround
from ensemble_horizon.night.comparison.gaps import note_gaps
from ensemble_horizon.night.estimate import Progress
from ensemble_horizon.night.verification.results import VerifiedResult
from ensemble_horizon.night.verification.scores import series_of
from ensemble_horizon.night.verification.verifying import verify_input
from ensemble_horizon.settings import Settings
from ensemble_horizon.skill.reduction import ScoreSums
from ensemble_horizon.versions import compare_scores
from ensemble_horizon.vocabulary import LEAD, PLACE, SCORE, START


class _Compared(NamedTuple):
    """A quantity that is compared: what it is called, and the power of the units in it."""

    text: str
    power: int


COMPARED = {
    "crps": _Compared("fair CRPS", 1),
    "squared_error": _Compared("squared error of the ensemble mean", 2),
}


def score_differences(
    ground: CommonGround, confidence: float, progress: Progress
) -> list[xr.Dataset]:
    """Differences of scores by lead, one dataset (score, lead, place) per variable.

    Empty, with a note where only one version says what to hold it against, unless the settings of
    both name analyses or observations. The runs are read once more for it.
    """
    truth = [bool(item.analyses or item.observations) for item in ground.settings]
    if not all(truth):
        if any(truth):
            lacking = ground.labels[truth.index(False)]
            ground.notes.left_out.append(
                f"scores: the settings of {lacking} name no analyses and no observations"
            )
        return []
    names = [name for name in ground.criteria if all(_scored(i, name) for i in ground.settings)]
    ground.notes.left_out += [
        f"scores of {name}: a position, or nothing to hold it against in one of them"
        for name in ground.criteria
        if name not in names
    ]
    if not names:
        return []
    if _truth(ground.settings[0]) != _truth(ground.settings[1]):
        ground.notes.cautions.append(
            "scores: the two versions are held against other analyses or observations, and part "
            "of the difference may come from there"
        )
    _note_sizes(ground)
    found = []
    chosen = [_only(settings, names) for settings in ground.settings]
    for version, (label, input_) in enumerate(zip(ground.labels, ground.found, strict=True)):

        def told(stage: str, done: float, total: float, label: str = label) -> None:
            progress(f"{stage} {label}", done, total)

        found.append(verify_input(chosen[version], input_, told))
        ground.faults[version].extend(found[-1].faults)
        ground.notes.left_out += [f"scores of {label}: {text}" for text in found[-1].left_out]
    a, b = found
    note_gaps((a.gaps, b.gaps), ground.labels, ground.notes)
    return [
        _differences(ground, first, second, confidence)
        for first, second in zip(a.results, b.results, strict=True)
    ]


def _sizes(ground: CommonGround) -> tuple[int, int]:
    """Members of both versions."""
    a, b = (len(item.catalogue.members) for item in ground.found)
    return a, b


def _note_sizes(ground: CommonGround) -> None:
    few, many = sorted(_sizes(ground))
    if few != many:
        ground.notes.cautions.append(
            f"scores: squared errors of both are those of the mean of {few} members: by how much "
            f"the mean of {few} errs more than that of {many} is told by the spread, and added "
            "(Ferro 2014, Leutbecher 2019); the fair CRPS does not depend on the number of members"
        )


def _scored(settings: Settings, name: str) -> bool:
    """Whether a variable can be held against anything."""
    held = settings.analyses is not None or name in settings.observations
    return held and settings.variables[name].position is None


def _truth(settings: Settings) -> list[object]:
    """Where what the runs are held against comes from."""
    files: list[object] = []
    if settings.analyses is not None:
        given = settings.analyses.files
        names = (given,) if isinstance(given, str) else given
        files += [settings.path(name) for name in names]
    return files + [settings.path(item.file) for item in settings.observations.values()]


def _only(settings: Settings, names: list[str]) -> Settings:
    """The settings with these variables, and without maps."""
    return settings.model_copy(
        update={
            "variables": {name: settings.variables[name] for name in names},
            "products": settings.products.model_copy(update={"maps": "none"}),
        }
    )


def _differences(
    ground: CommonGround, a: VerifiedResult, b: VerifiedResult, confidence: float
) -> xr.Dataset:
    """The differences of one variable at the places that both have."""
    names = [name for name in _places(a) if name in _places(b)]
    parts = []
    for quantity, (text, power) in COMPARED.items():
        first, second = (
            _series(
                version, input_.catalogue.starts, quantity, power, names, min(_sizes(ground))
            ).assign_attrs(long_name=text, units=_units(a, power))
            for version, input_ in zip((a, b), ground.found, strict=True)
        )
        parts.append(compare_scores(first, second, confidence=confidence))
    joined = xr.concat(parts, dim=SCORE, combine_attrs="drop", coords="minimal", compat="override")
    units = [_units(a, power) for _, power in COMPARED.values()]
    return joined.assign_coords(
        {
            SCORE: list(COMPARED),
            "score_text": (SCORE, [item.text for item in COMPARED.values()]),
            "score_units": (SCORE, units),
            PLACE: [place for place, _ in names],
            "against": (PLACE, [against for _, against in names]),
        }
    ).assign_attrs(
        variable=a.frame.variable,
        long_name=a.frame.long_name,
        lead_units=a.frame.lead_units,
        version_a=ground.labels[0],
        version_b=ground.labels[1],
        start_count=len(ground.starts),
        first_start=ground.starts[0],
        last_start=ground.starts[-1],
        confidence=confidence,
    )


def _places(result: VerifiedResult) -> list[tuple[str, str]]:
    """Names of the places, and what they are held against."""
    return [(name, what) for what, places in result.kinds.items() for name, _ in places]


def _series(
    result: VerifiedResult,
    starts: np.ndarray,
    quantity: str,
    power: int,
    names: list[tuple[str, str]],
    members: int,
) -> xr.DataArray:
    """What each start brings of a quantity: (start, lead, place), in the units of the results."""
    columns = [
        _brought(sums, quantity, members)[..., : len(result.kinds[what])]
        for what, sums in result.series.items()
    ]
    values = np.concatenate(columns, axis=-1) * result.factor**power
    own = _places(result)
    return xr.DataArray(
        values[..., [own.index(name) for name in names]],
        dims=(START, LEAD, PLACE),
        coords={START: starts, LEAD: result.frame.lead_axis},
    )


def _brought(sums: Sequence[ScoreSums], quantity: str, members: int) -> np.ndarray:
    """What each start brings (S, L, R); squared errors as of the mean of so many members."""
    values = series_of(sums, quantity)
    if quantity != "squared_error":
        return values
    variance = series_of(sums, "variance")
    surplus = series_of(sums, "expected_squared_error") - variance  # over the members that count
    return np.asarray(values - surplus + variance / members)


def _units(result: VerifiedResult, power: int) -> str:
    return result.frame.units if power == 1 else f"({result.frame.units}){power}"
