"""One block of members and analyses reduced to sums of scores where it was read.

A block is one start, a few leads and all members over one window of the grid, with the analyses at
its valid times. Every point counts in all scores or in none: skill, ratio and correlation compare
like with like. A control, climatology or persistence that has no value at all in the block's window
at a lead is absent, and its own scores are missing; one with gaps takes them into every score.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np

from ensemble_horizon.skill.consistency import expected_squared_error
from ensemble_horizon.skill.crps import crps_of_departures, gaussian_crps
from ensemble_horizon.skill.quantities import CLIMATOLOGY, CONTROL, PERSISTENCE, QUANTITIES
from ensemble_horizon.skill.ranks import outside, ranks, sides
from ensemble_horizon.spread.moments import member_deviations, variance_of
from ensemble_horizon.spread.reduction import RegionWeights, located

# Points handled at once: members x slab x 4 bytes should stay inside a core's own cache.
_SLAB = 8192
_ROUNDING = 1e-9


@dataclass(frozen=True)
class ScoreReduction:
    """What to keep of every block.

    Parameters
    ----------
    size : int
        Points of the flattened grid.
    places : tuple of RegionWeights
        Regions; a site is a region of one point.
    control : int, optional
        Which member is the control.
    mean, deviation : (size,), optional
        Climatological mean and standard deviation at every point.
    fields : tuple of str
        Quantities wanted at every point, of `ensemble_horizon.skill.quantities.QUANTITIES`.
    seed : int
        Of the random draws where the analysis equals members.
    """

    size: int
    places: tuple[RegionWeights, ...] = ()
    control: int | None = None
    mean: np.ndarray | None = None
    deviation: np.ndarray | None = None
    fields: tuple[str, ...] = ()
    seed: int = 0


@dataclass
class ScoreSums:
    """What is left of T leads, M members, P points; Q quantities, R places.

    sums, weights : (Q, T, R) sums of weight x quantity, and of the weights of points that have it
    ranks : (T, R, M + 1) sums of weights by the rank of the analysis
    fields : quantity (T, P) float32 at every point, for those wanted; NaN where there is none
    """

    sums: np.ndarray
    weights: np.ndarray
    ranks: np.ndarray
    fields: dict[str, np.ndarray]

    def add(self, part: ScoreSums, leads: slice, points: np.ndarray | None) -> None:
        """Put the sums of a block into their place in the sums of a whole start."""
        self.sums[:, leads] += part.sums
        self.weights[:, leads] += part.weights
        self.ranks[leads] += part.ranks
        where = slice(None) if points is None else points
        for name, field in part.fields.items():
            self.fields[name][leads, where] = field

    def mean(self, quantity: str) -> np.ndarray:
        """Mean (T, R) over the points of each place; NaN where it is absent, even in part.

        A part of the points would not be compared with like.
        """
        row = QUANTITIES.index(quantity)
        weight = self.weights[row]
        whole = weight >= self.weights[0] * (1 - _ROUNDING)
        with np.errstate(invalid="ignore", divide="ignore"):
            return np.where(whole & (weight > 0), self.sums[row] / weight, np.nan)


def empty_scores(reduction: ScoreReduction, members: int, leads: int, size: int) -> ScoreSums:
    """Sums with nothing in them yet."""
    places = len(reduction.places)
    return ScoreSums(
        sums=np.zeros((len(QUANTITIES), leads, places)),
        weights=np.zeros((len(QUANTITIES), leads, places)),
        ranks=np.zeros((leads, places, members + 1)),
        fields={name: np.full((leads, size), np.nan, np.float32) for name in reduction.fields},
    )


def reduce_scores(
    values: np.ndarray,
    analysis: np.ndarray,
    reduction: ScoreReduction,
    points: np.ndarray | None = None,
    persistence: np.ndarray | None = None,
    moment: tuple[int, ...] = (),
) -> ScoreSums:
    """Reduce members and analyses of a block to sums of scores.

    Parameters
    ----------
    values : (M, T, P) floats, NaN where there is no value
    analysis : (T, P), at the valid times, in the same units
    reduction : ScoreReduction
    points : (P,) int, increasing, or None
        Which points of the flattened grid these are; None means all of them.
    persistence : (P,), optional
        The analysis at the start.
    moment : tuple of int
        What tells this block from others in time, such as start and first lead: ties between
        members and analysis are broken by random numbers of its own.

    Examples
    --------
    >>> whole = RegionWeights("domain", np.arange(2), np.array([0.5, 0.5]))
    >>> values = np.array([[[0.0, 1.0]], [[2.0, 3.0]]])
    >>> sums = reduce_scores(values, np.array([[1.0, 0.0]]), ScoreReduction(2, (whole,)))
    >>> sums.mean("squared_error").tolist(), sums.mean("expected_squared_error").tolist()
    ([[2.0]], [[3.0]])
    >>> sums.ranks.tolist()
    [[[0.5, 0.5, 0.0]]]
    """
    members, leads, size = values.shape
    found = empty_scores(reduction, members, leads, size)
    window = slice(None) if points is None else points
    still = {
        CLIMATOLOGY: None if reduction.mean is None else reduction.mean[window],
        PERSISTENCE: persistence,
    }
    deviation = reduction.deviation
    if deviation is not None:
        deviation = deviation[window].astype(values.dtype, copy=False)
    table = np.empty((len(QUANTITIES), min(_SLAB, size)))
    places = [_part(place, points) for place in reduction.places]
    for lead in range(leads):
        block = _Lead(values[:, lead], analysis[lead], reduction, still, deviation)
        generator = np.random.default_rng(
            [reduction.seed, *moment, lead, 0 if points is None else int(points[0])]
        )
        if block.present.sum() < 2:
            continue
        for first in range(0, size, _SLAB):
            slab = slice(first, min(first + _SLAB, size))
            kept = None if block.known[slab].all() else np.flatnonzero(block.known[slab])
            chosen = slab if kept is None else first + kept
            piece, rank = block.scores(chosen, generator)
            counts = rank >= 0
            every = bool(counts.all())
            for name in reduction.fields:
                if name in piece:
                    field = piece[name] if every else np.where(counts, piece[name], np.nan)
                    found.fields[name][lead, chosen] = field
            parts = [part.within(slab, kept) for part in places]
            _sum_up(found, lead, piece, rank, parts, table[:, : rank.size])
    return found


class _Lead:
    """Members and references at one lead, P points."""

    def __init__(
        self,
        values: np.ndarray,
        analysis: np.ndarray,
        reduction: ScoreReduction,
        still: Mapping[str, np.ndarray | None],
        deviation: np.ndarray | None,
    ) -> None:
        self.values, self.analysis, self.deviation = values, analysis, deviation
        references = {name: item for name, item in still.items() if item is not None}
        if reduction.control is not None:
            references[CONTROL] = values[reduction.control]
        self.known = np.isfinite(analysis)
        self.references = {}
        for name, item in references.items():
            here = np.isfinite(item)
            if here.any():
                self.references[name] = item
                self.known &= here
        # A member without any value is no gap: the others are taken as they are.
        self.present = np.isfinite(values).any(axis=1)

    def scores(
        self, chosen: slice | np.ndarray, generator: np.random.Generator
    ) -> tuple[dict[str, np.ndarray], np.ndarray]:
        """Quantities of some points by name, and ranks there, -1 at points that do not count."""
        rows = self.values if self.present.all() else self.values[self.present]
        departure = rows[:, chosen] - self.analysis[chosen]
        deviations, count = member_deviations(departure)
        whole = bool((count == departure.shape[0]).all())
        # Where no member lacks a value one count stands for all points.
        number = count[:1] if whole else count
        variance = variance_of([deviations], number)
        error = departure[0] - deviations[0]
        if not whole:
            gaps = np.flatnonzero(~np.isfinite(error))
            first = np.argmax(np.isfinite(departure[:, gaps]), axis=0)
            error[gaps] = departure[first, gaps] - deviations[first, gaps]
        found = sides(departure, count)
        piece = {
            "error": error,
            "squared_error": error**2,
            "variance": variance,
            "expected_squared_error": expected_squared_error(variance, number),
            "crps": crps_of_departures(departure),
            "outside": outside(found),
            "outside_expected": 2 / (number + 1.0),
        }
        self._add_references(piece, chosen)
        rank = ranks(found, self.values.shape[0], generator)
        rank[count < 2] = -1
        return piece, rank

    def _add_references(self, piece: dict[str, np.ndarray], chosen: slice | np.ndarray) -> None:
        truth = self.analysis[chosen]
        forecasts = {"": piece["error"]}
        if CONTROL in self.references:
            error = self.references[CONTROL][chosen] - truth
            forecasts["control_"] = error
            piece |= {
                "control_error": error,
                "control_squared_error": error**2,
                "control_crps": np.abs(error),
            }
        if CLIMATOLOGY in self.references:
            anomaly = truth - self.references[CLIMATOLOGY][chosen]
            piece |= {"anomaly": anomaly, "anomaly_squared": anomaly**2}
            if self.deviation is not None:
                # In the members' own precision: of all scores of a point it takes the most time.
                away = anomaly.astype(self.deviation.dtype, copy=False)
                piece["climatology_crps"] = gaussian_crps(away, self.deviation[chosen])
            for name, error in forecasts.items():
                forecast = anomaly + error
                piece[f"{name}product"] = forecast * anomaly
                piece[f"{name}forecast_squared"] = forecast**2
        if PERSISTENCE in self.references:
            error = self.references[PERSISTENCE][chosen] - truth
            piece |= {"persistence_squared_error": error**2, "persistence_crps": np.abs(error)}


@dataclass(frozen=True)
class _Part:
    """Positions within a window of the points of a place, and their weights."""

    position: np.ndarray
    weight: np.ndarray

    def within(self, slab: slice, kept: np.ndarray | None) -> tuple[slice | np.ndarray, np.ndarray]:
        """Columns of a slab that lie in the place, of those kept, and their weights."""
        low, high = np.searchsorted(self.position, [slab.start, slab.stop])
        position, weight = self.position[low:high] - slab.start, self.weight[low:high]
        if kept is not None:
            dense = np.zeros(slab.stop - slab.start)
            dense[position] = weight
            weight = dense[kept]
            position = np.flatnonzero(weight)
            weight = weight[position]
        if position.size and position[-1] - position[0] + 1 == position.size:
            return slice(int(position[0]), int(position[-1]) + 1), weight
        return position, weight


def _part(place: RegionWeights, points: np.ndarray | None) -> _Part:
    position, target = located(place.index, points)
    return _Part(position, place.weight[target])


def _sum_up(
    found: ScoreSums,
    lead: int,
    piece: Mapping[str, np.ndarray],
    rank: np.ndarray,
    parts: list[tuple[slice | np.ndarray, np.ndarray]],
    table: np.ndarray,
) -> None:
    """Add the weighted sums over each place; ``table`` (Q, P) is room for the quantities."""
    if rank.size == 0:
        return
    rows = [QUANTITIES.index(name) for name in piece]
    table = table[: len(rows)]
    for row, item in zip(table, piece.values(), strict=True):
        row[...] = item
    for number, (columns, weight) in enumerate(parts):
        if weight.size == 0:
            continue
        here, values = rank[columns], table[:, columns]
        total = values @ weight
        # A gap at any point makes its sum NaN.
        if np.isfinite(total).all() and here.min() >= 0:
            found.sums[rows, lead, number] += total
            found.weights[rows, lead, number] += weight.sum()
        else:
            weight = np.where(here >= 0, weight, 0.0)
            there = np.isfinite(values)
            found.sums[rows, lead, number] += np.where(there, values, 0.0) @ weight
            found.weights[rows, lead, number] += there @ weight
            here = np.maximum(here, 0)
        found.ranks[lead, number] += np.bincount(here, weight, found.ranks.shape[2])
