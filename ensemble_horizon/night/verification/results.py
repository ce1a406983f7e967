"""What comes out of verifying one variable, as labelled datasets that products are made from."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
import xarray as xr

from ensemble_horizon.horizon.skill_limits import Falls
from ensemble_horizon.night.verification.scores import SCORES, PlaceScores, place_scores
from ensemble_horizon.runs import Grid
from ensemble_horizon.serial import REASON_ATTRIBUTES
from ensemble_horizon.skill.reduction import ScoreSums
from ensemble_horizon.vocabulary import (
    COORDINATE_ATTRIBUTES,
    LEAD,
    LIMIT,
    PLACE,
    RANK,
    SCORE,
    STATUS_ATTRIBUTES,
)

LIMIT_TEXTS = {
    "skill_climatology": "skill over climatology",
    "skill_persistence": "skill over persistence",
    "anomaly_correlation": "anomaly correlation",
    "control_anomaly_correlation": "anomaly correlation of the control",
}
_TIMES = {
    "horizon": "horizon",
    "horizon_low": "low",
    "horizon_high": "high",
    "significant_until": "significant_until",
    "gap": "gap",
}
_FLAGS = {name: name for name in ("status", "significant_status")}


@dataclass(frozen=True)
class Frame:
    """What all results of one variable share.

    Parameters
    ----------
    variable, long_name, units : str
    lead : (L,)
    lead_units : str
    confidence : float
    starts, members : int
    levels : what each score with a limit falls to
    resamples : of blocks of starts, for a second opinion on intervals; 0 for none
    """

    variable: str
    long_name: str
    units: str
    lead: np.ndarray
    lead_units: str
    confidence: float
    starts: int
    members: int
    levels: Mapping[str, float]
    resamples: int = 0

    @property
    def attributes(self) -> dict[str, Any]:
        """Attributes of a dataset."""
        return {
            "variable": self.variable,
            "long_name": self.long_name,
            "units": self.units,
            "lead_units": self.lead_units,
            "last_lead": float(self.lead[-1]),
            "confidence": self.confidence,
            "starts": self.starts,
            "members": self.members,
        }

    @property
    def lead_axis(self) -> tuple[str, np.ndarray, dict[str, str]]:
        """The lead coordinate."""
        return LEAD, self.lead, {**COORDINATE_ATTRIBUTES[LEAD], "units": self.lead_units}

    def limits(self, names: Sequence[str]) -> dict[str, tuple[str, list[Any]]]:
        """Coordinates of the limits."""
        return {
            LIMIT: (LIMIT, list(names)),
            "limit_text": (LIMIT, [LIMIT_TEXTS[name] for name in names]),
            "level": (LIMIT, [self.levels[name] for name in names]),
        }

    def scores(self, names: Sequence[str]) -> dict[str, tuple[str, list[str]]]:
        """Coordinates of the scores."""
        known = {score.name: score for score in SCORES}
        units = [self.units if known[name].sized else "1" for name in names]
        return {
            SCORE: (SCORE, list(names)),
            "score_text": (SCORE, [known[name].text for name in names]),
            "score_units": (SCORE, units),
        }


@dataclass(frozen=True)
class VerifiedResult:
    """Scores of one variable at places, its maps where they were asked for, and the raw sums.

    Parameters
    ----------
    places : Dataset of regions, sites and observed sites
    maps : Dataset or None
    frame : Frame
    kinds : names and kinds of the places by what they are held against
    series : sums of each start by what they are held against, in the units of the files
    factor : from those units to those of the results, for differences
    """

    places: xr.Dataset
    maps: xr.Dataset | None
    frame: Frame
    kinds: Mapping[str, Sequence[tuple[str, str]]]
    series: Mapping[str, Sequence[ScoreSums]]
    factor: float


def result_of_places(
    frame: Frame,
    kinds: Mapping[str, Sequence[tuple[str, str]]],
    series: Mapping[str, Sequence[ScoreSums]],
    factor: float,
) -> VerifiedResult:
    """Score all places from the sums of all starts, in order of time; without maps."""
    scored = {
        what: place_scores(
            frame.lead,
            sums,
            factor,
            dict(frame.levels),
            frame.confidence,
            len(kinds[what]),
            frame.resamples,
        )
        for what, sums in series.items()
    }
    data = places_dataset(frame, kinds, scored)
    return VerifiedResult(data, None, frame, kinds, series, factor)


def places_dataset(
    frame: Frame,
    kinds: Mapping[str, Sequence[tuple[str, str]]],
    scored: Mapping[str, PlaceScores],
) -> xr.Dataset:
    """Scores, ranks and limits of all places, against analyses and then against observations."""
    parts = [_one_truth(frame, kinds[what], what, found) for what, found in scored.items()]
    joined = xr.concat(parts, PLACE, join="outer", coords="minimal", compat="override",
                       fill_value={"reason": np.int8(1), "status": np.int8(4),
                                   "significant_status": np.int8(4)})  # fmt: skip
    names = [score.name for score in SCORES if score.name in joined[SCORE].values]
    limits = [name for name in LIMIT_TEXTS if name in joined[LIMIT].values]
    joined = joined.sel({SCORE: names, LIMIT: limits})
    joined = joined.assign_coords({**frame.scores(names), **frame.limits(limits)})
    return joined.assign_attrs(frame.attributes)


def _one_truth(
    frame: Frame, kinds: Sequence[tuple[str, str]], against: str, found: PlaceScores
) -> xr.Dataset:
    names, limits = list(found.scores), list(found.limits)
    shape = (len(names), frame.lead.size, len(kinds))
    data: dict[str, Any] = {}
    for name in ("value", "low", "high", "starts", "reason"):
        rows = [getattr(found.scores[score], name) for score in names]
        values = np.stack(rows) if rows else np.empty(shape)
        data[name] = ((SCORE, PLACE, LEAD), values.transpose(0, 2, 1))
    data["starts"] = (data["starts"][0], data["starts"][1].astype(np.int32))
    data["reason"] = (data["reason"][0], data["reason"][1].astype(np.int8), REASON_ATTRIBUTES)
    if found.blocks:
        for name in ("low", "high", "length"):
            values = np.stack([getattr(found.blocks[score], name) for score in names])
            data[f"block_{name}"] = ((SCORE, PLACE, LEAD), values.transpose(0, 2, 1))
    data["rank_share"] = ((PLACE, LEAD, RANK), found.ranks.transpose(1, 0, 2))
    data["rank_p_value"] = ((PLACE, LEAD), found.flat.p_value.T)
    data |= _limits(found.limits, (LIMIT, PLACE), (len(kinds),))
    coords: dict[str, Any] = {
        SCORE: names,
        LIMIT: limits,
        LEAD: frame.lead_axis,
        PLACE: [name for name, _ in kinds],
        "place_kind": (PLACE, [kind for _, kind in kinds]),
        "against": (PLACE, [against] * len(kinds)),
    }
    return xr.Dataset(data, coords=coords)


def maps_dataset(
    frame: Frame,
    grid: Grid,
    scores: Mapping[str, np.ndarray],
    falls: Mapping[str, Falls],
    interval: Mapping[str, tuple[np.ndarray, np.ndarray]],
) -> xr.Dataset:
    """Scores by lead and limits at every grid point."""
    texts = {score.name: score for score in SCORES}
    data: dict[str, Any] = {}
    for name, values in scores.items():
        units = frame.units if texts[name].sized else "1"
        about = {"long_name": texts[name].text, "units": units}
        data[name] = ((LEAD, *grid.dims), values.reshape(-1, *grid.shape), about)
    for name, ends in interval.items():
        for end, values in zip(("low", "high"), ends, strict=True):
            text = f"{'lower' if end == 'low' else 'upper'} end of the {frame.confidence:.0%} "
            about = {"long_name": f"{text}interval of the {texts[name].text}", "units": "1"}
            data[f"{name}_{end}"] = ((LEAD, *grid.dims), values.reshape(-1, *grid.shape), about)
    data |= _limits(falls, (LIMIT, *grid.dims), grid.shape)
    for name in _TIMES:
        data[name] = (data[name][0], data[name][1].astype(np.float32), *data[name][2:])
    coords = {**dict(grid.coords), LEAD: frame.lead_axis, **frame.limits(list(falls))}
    return xr.Dataset(data, coords=coords, attrs=frame.attributes)


def _limits(
    falls: Mapping[str, Falls], dims: tuple[str, ...], shape: tuple[int, ...]
) -> dict[str, Any]:
    data: dict[str, Any] = {}
    for name, own in (_TIMES | _FLAGS).items():
        rows = [getattr(found, own).reshape(shape) for found in falls.values()]
        values = np.stack(rows) if rows else np.empty((0, *shape))
        if name in _FLAGS:
            data[name] = (dims, values.astype(np.int8), dict(STATUS_ATTRIBUTES))
        else:
            data[name] = (dims, values)
    return data
