"""Maps of one variable: batches of grid points through the engine."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Literal

import numpy as np

from ensemble_horizon.horizon.interval import MoveTable, move_table
from ensemble_horizon.horizon.map_limits import (
    MapOptions,
    PointBatch,
    limits_of_points,
    split_points,
)
from ensemble_horizon.night.engine import Engine
from ensemble_horizon.night.variables import Variable
from ensemble_horizon.runs import Catalogue
from ensemble_horizon.settings import Settings
from ensemble_horizon.spread.moments import member_variance
from ensemble_horizon.spread.reduction import Summary
from ensemble_horizon.spread.sample import SampleLayout
from ensemble_horizon.spread.sampling import (
    LEAST_STARTS,
    LeadNoise,
    mean_over_starts,
    noise_from_points,
    pooled_noise,
)

# Points of one task: never by the number of workers, on which no number may depend.
_BATCH = 8192


@dataclass(frozen=True)
class MapPlan:
    """Which maps are made, and what is kept of them.

    Parameters
    ----------
    mode : of each start, of all starts pooled, or none
    confidence : float or None
        Of the intervals at grid points; None without intervals.
    fields : tuple of str
        Names of the fields that are kept; all of them where none is named. Laws are fitted only if
        one of these rests on them.
    """

    mode: Literal["each", "pooled", "none"]
    confidence: float | None = None
    fields: tuple[str, ...] = ()


def map_plan(settings: Settings, catalogue: Catalogue) -> MapPlan:
    """The maps that the settings ask for: of every start, or pooled where there are several."""
    confidence = settings.growth.confidence if settings.products.map_intervals else None
    if not catalogue.grid.shape:
        return MapPlan("none")
    mode = settings.products.maps or ("each" if catalogue.starts.size == 1 else "pooled")
    return MapPlan(mode, confidence)


def map_options(settings: Settings, plan: MapPlan, variable: Variable, members: int) -> MapOptions:
    """What is asked at every point of the maps of a variable."""
    return MapOptions(
        criteria=tuple(variable.criteria.values()),
        hold=variable.hold,
        law=settings.growth.law,
        scale=settings.growth.scale,
        confidence=plan.confidence,
        members=members,
        fields=plan.fields,
    )


@dataclass(frozen=True)
class FieldNoise:
    """Sampling noise of a field: pooled over each block, and over the whole."""

    blocks: tuple[LeadNoise, ...]
    whole: LeadNoise


@dataclass
class Fields:
    """Spread variance and shares at every point, in the units of the files.

    variance : (L, P); share : (A, L, P) or None; noise : FieldNoise
    """

    variance: np.ndarray
    share: np.ndarray | None
    noise: FieldNoise


def noise_of_start(summary: Summary, layout: SampleLayout, kurtosis: float) -> FieldNoise:
    """Noise of the maps of one start, from its sample points."""
    blocks: list[LeadNoise | None] = []
    for block in range(layout.blocks):
        values = summary.sample_values[:, :, layout.block_of_sample == block]
        told = (np.isfinite(values[..., 0]).sum(axis=1) > 1).any()
        blocks.append(noise_from_points(values, kurtosis) if told else None)
    return _field_noise(blocks, summary.sample_values.shape[0])


class PooledFields:
    """Fields averaged over starts as they come in; only the thin sample is kept of each start."""

    def __init__(self, layout: SampleLayout) -> None:
        self._layout = layout
        self._total: np.ndarray | None = None
        self._share: np.ndarray | None = None
        self._count: np.ndarray | None = None
        self._samples: list[np.ndarray] = []
        self._noises: list[FieldNoise] = []

    def add(self, summary: Summary, noise: FieldNoise) -> None:
        """Take in one start."""
        assert summary.variance is not None
        if self._total is None:
            self._total = np.zeros_like(summary.variance)
            self._count = np.zeros(summary.variance.shape, dtype=np.int16)
            if summary.share is not None:
                self._share = np.zeros_like(summary.share)
        known = np.isfinite(summary.variance)
        self._total += np.where(known, summary.variance, 0)
        self._count += known
        if self._share is not None and summary.share is not None:
            self._share += np.where(known, summary.share, 0)
        components = summary.sample_values.transpose(3, 1, 0, 2)
        self._samples.append(member_variance(*components)[0])
        if len(self._noises) < LEAST_STARTS:  # with more starts the scatter between them counts
            self._noises.append(noise)

    def fields(self, confidence: float) -> Fields:
        """What all starts together say."""
        assert self._total is not None
        assert self._count is not None
        with np.errstate(invalid="ignore", divide="ignore"):
            variance = self._total / self._count
            share = None if self._share is None else self._share / self._count
        return Fields(variance, share, self._noise(confidence))

    def _noise(self, confidence: float) -> FieldNoise:
        samples = np.stack(self._samples)
        known = np.isfinite(mean_over_starts(samples)).any(axis=0)
        blocks: list[LeadNoise | None] = []
        for block in range(self._layout.blocks):
            chosen = (self._layout.block_of_sample == block) & known
            members = [noise.blocks[block] for noise in self._noises]
            blocks.append(
                pooled_noise(samples[:, :, chosen], members, confidence) if chosen.any() else None
            )
        return _field_noise(blocks, samples.shape[1])


def map_fields(
    engine: Engine,
    lead: np.ndarray,
    fields: Fields,
    variable: Variable,
    layout: SampleLayout,
    options: MapOptions,
) -> dict[str, np.ndarray]:
    """Fits and horizons at every point: (P,) or (C, P) arrays by name."""
    size = fields.variance.shape[1]
    table = None
    if options.confidence is not None:
        table = move_table(lead, fields.noise.whole, options.confidence, hold=options.hold)
    parts = split_points(size, -(-size // _BATCH))
    tasks = ((_batch(lead, fields, variable, layout, part, table), options) for part in parts)
    result: dict[str, np.ndarray] = {}
    for number, found in engine.run(_limits, tasks):
        for name, values in found.items():
            if name not in result:
                result[name] = np.empty((*values.shape[:-1], size), dtype=values.dtype)
            result[name][..., parts[number]] = values
    return result


def _batch(
    lead: np.ndarray,
    fields: Fields,
    variable: Variable,
    layout: SampleLayout,
    part: slice,
    table: MoveTable | None,
) -> PointBatch:
    shares = {}
    if fields.share is not None:
        shares = {
            distance: fields.share[number][:, part]
            for number, distance in enumerate(variable.distances)
        }
    climatology = None if variable.climatology is None else variable.climatology[part]
    return PointBatch(
        lead=lead,
        variance=fields.variance[:, part] * np.float32(variable.factor**2),
        shares=shares,
        climatology=climatology,
        block=layout.block_of_point[part],
        noises=fields.noise.blocks,
        noise=fields.noise.whole,
        table=table,
    )


def _limits(task: tuple[PointBatch, MapOptions]) -> dict[str, np.ndarray]:
    return limits_of_points(*task)


def _field_noise(blocks: Sequence[LeadNoise | None], leads: int) -> FieldNoise:
    """The noise of a field from that of its blocks; None marks a block without values."""
    told = [noise for noise in blocks if noise is not None]
    if not told:
        told = [LeadNoise(np.ones(leads), np.eye(leads))]
    whole = LeadNoise(
        np.mean([noise.dof for noise in told], axis=0),
        np.mean([noise.correlation for noise in told], axis=0),
        float(np.mean([noise.inflation for noise in told])),
    )
    return FieldNoise(tuple(whole if noise is None else noise for noise in blocks), whole)
