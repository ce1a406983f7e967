"""Limits at many points at once: a batch of grid points through fit, criteria and intervals."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field
from itertools import pairwise

import numpy as np
from scipy import special

from ensemble_horizon.growth.laws import LAWS
from ensemble_horizon.growth.selection import NO_LAW, Selection
from ensemble_horizon.horizon.chosen import chosen_groups, quantity_sensitivity
from ensemble_horizon.horizon.criteria import (
    Chance,
    Criterion,
    Levels,
    SaturationFraction,
)
from ensemble_horizon.horizon.curve_growth import select_where_enough
from ensemble_horizon.horizon.horizon import judge
from ensemble_horizon.horizon.interval import (
    Moves,
    MoveTable,
    plain_moves,
    share_bounds,
    spread_bounds,
)
from ensemble_horizon.horizon.trend import grows
from ensemble_horizon.spread.sampling import LeadNoise
from ensemble_horizon.vocabulary import Status

# Relative fall of the residual sum of squares at which a fit at a grid point ends: on a map the
# digits beyond are not seen, and they cost a fifth of the time.
MAP_TOLERANCE = 1e-8

LAW_NAMES = ("none", *LAWS)  # in the order of the flags of fit_growth


@dataclass(frozen=True)
class MapOptions:
    """What is asked at every point.

    Parameters
    ----------
    criteria : sequence of Criterion
    hold : float, in lead units
    law, scale : str
        As `select_where_enough` takes them; law "auto" for a choice by AICc.
    confidence : float or None
        None leaves the intervals out.
    members : int
        Members that shares rest on.
    fields : tuple of str
        What is wanted of that which `limits_of_points` gives; all of it where nothing is named.
    """

    criteria: tuple[Criterion, ...]
    hold: float
    law: str
    scale: str
    confidence: float | None
    members: int
    fields: tuple[str, ...] = ()

    @property
    def rests_on_law(self) -> bool:
        """Whether a law has to be fitted for what is wanted."""
        told_without = {"horizon", "status", "threshold"}
        plain = self.confidence is None and self.fields and told_without.issuperset(self.fields)
        return not plain or any(isinstance(item, SaturationFraction) for item in self.criteria)


@dataclass(frozen=True)
class PointBatch:
    """N grid points.

    Parameters
    ----------
    lead : (L,)
    variance : (L, N) spread variance
    shares : mapping of distance to (L, N)
    climatology : (N,) or None
    block : (N,) int, position in ``noises``
    noise : LeadNoise of the whole map
    noises : LeadNoise of each block of the map
    table : MoveTable that goes with it, or None without intervals
    """

    lead: np.ndarray
    variance: np.ndarray
    noise: LeadNoise
    shares: Mapping[float, np.ndarray] = field(default_factory=dict)
    climatology: np.ndarray | None = None
    block: np.ndarray = field(default_factory=lambda: np.empty(0, dtype=int))
    noises: tuple[LeadNoise, ...] = ()
    table: MoveTable | None = None


def limits_of_points(batch: PointBatch, options: MapOptions) -> dict[str, np.ndarray]:
    """Fits and horizons of a batch.

    Returns
    -------
    dict
        ``growth_rate``, ``doubling_time``, ``initial_error``, ``saturation`` (N,) float32,
        ``law`` (N,) int8 position in `LAW_NAMES`; ``horizon``, ``threshold`` and with intervals
        ``low``, ``high`` (C, N) float32, ``status`` (C, N) int8. With intervals also
        ``growth_rate_low`` and so on, (N,) float32. Only the fields of the options, where these
        name any; laws are fitted, by far the most of the work, if any of those rests on them.
    """
    with np.errstate(invalid="ignore"):
        spread = np.sqrt(batch.variance.astype(np.float64))
    if options.rests_on_law:
        selection = select_where_enough(
            batch.lead, spread.T, options.law, options.scale, MAP_TOLERANCE
        )
    else:
        selection = Selection((), np.full(spread.shape[1], NO_LAW), ())
    result = _growth_values(selection)
    if options.confidence is not None:
        result |= _rate_intervals(batch, spread, selection, options)
    rows = [
        _limit(batch, options, criterion, spread, result, selection)
        for criterion in options.criteria
    ]
    result.pop("exact_saturation")
    for name in rows[0]:
        result[name] = np.stack([row[name] for row in rows])
    return {name: result[name] for name in options.fields or result}


def _growth_values(selection: Selection) -> dict[str, np.ndarray]:
    number = selection.chosen.size
    values = {
        name: np.full(number, np.nan)
        for name in ("growth_rate", "doubling_time", "initial_error", "saturation")
    }
    code = np.full(number, LAW_NAMES.index("none"), dtype=np.int8)
    for law, rows, parameters in chosen_groups(selection):
        code[rows] = LAW_NAMES.index(law.name)
        for quantity, column in values.items():
            column[rows] = getattr(law, quantity)(parameters)
    exact = values["saturation"]
    result = {name: column.astype(np.float32) for name, column in values.items()}
    return {**result, "law": code, "exact_saturation": exact}


def _limit(
    batch: PointBatch,
    options: MapOptions,
    criterion: Criterion,
    spread: np.ndarray,
    growth: dict[str, np.ndarray],
    selection: Selection,
) -> dict[str, np.ndarray]:
    number = spread.shape[1]
    levels = Levels(saturation=growth["exact_saturation"], climatology=batch.climatology)
    threshold = np.broadcast_to(np.asarray(criterion.threshold(levels), float), (number,))
    curves = spread
    if isinstance(criterion, Chance):
        curves = batch.shares[criterion.beyond].astype(np.float64)
    covariance = batch.noise.log_spread_covariance()

    def growing(rows: np.ndarray) -> np.ndarray:
        return grows(batch.lead, spread[:, rows], covariance)

    time, status = judge(batch.lead, curves, threshold, options.hold, growing)
    row = {
        "horizon": time.astype(np.float32),
        "status": status,
        "threshold": threshold.astype(np.float32),
    }
    if options.confidence is None:
        return row
    if isinstance(criterion, Chance):
        low, high = share_bounds(
            batch.lead, curves, options.members, criterion.probability,
            options.confidence, options.hold,
        )  # fmt: skip
    elif batch.lead.size < 2:  # no crossing between leads that a table could tell of
        plain = plain_moves(options.confidence, batch.noise.inflation)
        low, high = spread_bounds(
            batch.lead, spread, threshold, batch.noise.dof, plain, options.hold
        )
    else:
        before = _lead_before(batch.lead, time, status)
        moves = _moves(batch, threshold, before, selection)
        if criterion.kind == "saturation_fraction":
            moves = _moves_of_estimated_threshold(batch, spread, selection, options, moves, before)
        dof = batch.noise.dof
        low, high = spread_bounds(batch.lead, spread, threshold, dof, moves, options.hold)
    silent = (status == Status.no_data) | (status == Status.no_growth)
    row["low"] = np.where(silent, np.nan, low).astype(np.float32)
    row["high"] = np.where(silent, np.nan, high).astype(np.float32)
    return row


def _lead_before(lead: np.ndarray, time: np.ndarray, status: np.ndarray) -> np.ndarray:
    """Position (N,) of the lead before each crossing; the last but one where there is none."""
    crossing = np.where(np.isfinite(time), time, lead[-1])
    crossing[status == Status.at_start] = lead[0]
    return np.clip(np.searchsorted(lead, crossing) - 1, 0, lead.size - 2)


def _moves(
    batch: PointBatch, threshold: np.ndarray, before: np.ndarray, selection: Selection
) -> Moves:
    """Moves by the steepness of the fitted law where it reaches the threshold."""
    assert batch.table is not None
    rate = np.full(threshold.size, np.nan)
    for law, rows, parameters in chosen_groups(selection):
        rate[rows] = law.growth_rate(parameters, threshold[rows])
    step = np.diff(batch.lead)[before]
    noise = np.sqrt(special.polygamma(1, batch.noise.dof / 2) / 4)[before]
    steepness = np.where(np.isfinite(rate) & (rate > 0), rate * step / noise, 1.0)
    return batch.table.look_up(before, steepness)


def _moves_of_estimated_threshold(
    batch: PointBatch,
    spread: np.ndarray,
    selection: Selection,
    options: MapOptions,
    moves: Moves,
    before: np.ndarray,
) -> Moves:
    """Moves for a threshold that is itself estimated from the curve, by its saturation.

    What counts is the noise of the curve less that of the threshold, and the two go together.
    """
    level = np.full(before.size, np.nan)
    for law, rows, parameters in chosen_groups(selection):
        level[rows] = law.saturation(parameters)
    variance, cross = _noise_of("saturation", batch, spread, selection, options)
    own = np.diag(batch.noise.log_spread_covariance())[before]
    shared = np.take_along_axis(cross, before[:, np.newaxis], axis=1)[:, 0] / level
    extra = np.nan_to_num((variance / level**2 - 2 * shared) / own, nan=0.0, posinf=0.0)
    assert options.confidence is not None
    quantile = plain_moves(options.confidence, batch.noise.inflation).up
    # First crossings come early by as much as before; only the scatter about that changes.
    early, reach = (moves.down - moves.up) / 2, (moves.down + moves.up) / 2
    reach = np.sqrt(np.maximum(reach**2 + quantile**2 * extra, 0.0))
    return Moves(np.maximum(reach - early, 0.0), np.maximum(reach + early, 0.0))


def _rate_intervals(
    batch: PointBatch, spread: np.ndarray, selection: Selection, options: MapOptions
) -> dict[str, np.ndarray]:
    assert options.confidence is not None
    rate = np.full(selection.chosen.size, np.nan)
    for law, rows, parameters in chosen_groups(selection):
        rate[rows] = law.growth_rate(parameters)
    quantile = batch.noise.inflation * float(special.ndtri(1 - (1 - options.confidence) / 2))
    variance, _ = _noise_of("growth_rate", batch, spread, selection, options)
    reach = quantile * np.sqrt(variance)
    return {
        "growth_rate_low": (rate - reach).astype(np.float32),
        "growth_rate_high": (rate + reach).astype(np.float32),
    }


def _noise_of(
    quantity: str,
    batch: PointBatch,
    spread: np.ndarray,
    selection: Selection,
    options: MapOptions,
) -> tuple[np.ndarray, np.ndarray]:
    """Variance (N,) of a quantity of the law, and its covariance (N, L) with ln(spread).

    From the noise of each point's block.
    """
    variance = np.full(selection.chosen.size, np.nan)
    cross = np.full((selection.chosen.size, batch.lead.size), np.nan)
    for law, rows, parameters in chosen_groups(selection):
        usable = (spread[:, rows] > 0).T
        weight = quantity_sensitivity(law, quantity, parameters, batch.lead, usable, options.scale)
        for block in np.unique(batch.block[rows]):
            here = batch.block[rows] == block
            shared = weight[here] @ batch.noises[block].log_spread_covariance()
            cross[rows[here]] = shared
            variance[rows[here]] = np.maximum((shared * weight[here]).sum(axis=1), 0.0)
    return variance, cross


def split_points(size: int, parts: int) -> Sequence[slice]:
    """Cut N points into about ``parts`` equal slices."""
    edges = np.linspace(0, size, max(1, parts) + 1).astype(int)
    return [slice(int(a), int(b)) for a, b in pairwise(edges) if b > a]
