"""One block of members reduced where it was read.

A block is one start, a few leads and all members over one window of the grid. Nothing of the size
of the ensemble leaves `reduce_block`: fields of spread variance, weighted sums for regions, the
members' values at sites and at a thin sample of points. Positions become displacements here, and
everything after it has a component axis: one component of a scalar, two of a displacement.
"""

from __future__ import annotations

from dataclasses import dataclass, field
from typing import Protocol

import numpy as np

from ensemble_horizon.spread.displacements import displacements, whole_positions
from ensemble_horizon.spread.moments import beyond_median, component_deviations, variance_of

_SLAB = 8192


@dataclass(frozen=True)
class RegionWeights:
    """Weights over the flattened grid, kept as the points that count.

    index : (P,) int, increasing; weight : (P,) float summing to one
    """

    name: str
    index: np.ndarray
    weight: np.ndarray


@dataclass(frozen=True)
class Reduction:
    """What to keep of every block.

    Parameters
    ----------
    size : int
        Points of the flattened grid.
    regions : tuple of RegionWeights
    sites, sample : (S,) and (K,) int indices into the flattened grid
    beyond : tuple of float
        Distances from the median, for chance criteria.
    fields : bool
        Whether fields at every point are wanted.
    geometry : ``SPHERE`` or ``PLANE`` of positions, None for scalars
    """

    size: int
    regions: tuple[RegionWeights, ...] = ()
    sites: np.ndarray = field(default_factory=lambda: np.empty(0, dtype=int))
    sample: np.ndarray = field(default_factory=lambda: np.empty(0, dtype=int))
    beyond: tuple[float, ...] = ()
    fields: bool = True
    geometry: str | None = None

    @property
    def components(self) -> int:
        """Components of a value: one of a scalar, two of a displacement."""
        return 1 if self.geometry is None else 2


class MemberFields(Protocol):
    """What tells sound members of a start from others; see `Summary`.

    sample_values : any few numbers of each field, by which two that are alike are found
    """

    sample_values: np.ndarray
    gaps: np.ndarray
    low: np.ndarray
    high: np.ndarray


@dataclass
class Summary:
    """What is left of T leads, M members, P points; R regions, A distances, S sites, K samples.

    C is the number of components. Of positions, gaps and extremes are those of the latitude (or x)
    where the position is whole.
    """

    variance: np.ndarray | None  # (T, P)
    share: np.ndarray | None  # (A, T, P) share of members beyond the distance
    region_sum: np.ndarray  # (T, R) sum of weight x variance over points with a value
    region_weight: np.ndarray  # (T, R) sum of those weights
    gram: np.ndarray  # (T, R, M, M) weighted inner products of member deviations
    region_beyond: np.ndarray  # (A, T, R, M) weights where a member is beyond, over members there
    site_values: np.ndarray  # (T, M, S, C)
    sample_values: np.ndarray  # (T, M, K, C)
    gaps: np.ndarray  # (T, M) points without a value
    low: np.ndarray  # (T, M) smallest value
    high: np.ndarray  # (T, M) largest value

    def add(self, part: Summary, leads: slice, points: np.ndarray | None) -> None:
        """Put the summary of a block into its place in the summary of a whole start."""
        where = slice(None) if points is None else points
        if self.variance is not None and part.variance is not None:
            self.variance[leads, where] = part.variance
        if self.share is not None and part.share is not None:
            self.share[:, leads, where] = part.share
        self.region_sum[leads] += part.region_sum
        self.region_weight[leads] += part.region_weight
        self.gram[leads] += part.gram
        self.region_beyond[:, leads] += part.region_beyond
        for kept, found in (
            (self.site_values[leads], part.site_values),
            (self.sample_values[leads], part.sample_values),
        ):
            np.copyto(kept, found, where=np.isfinite(found))
        self.gaps[leads] += part.gaps
        self.low[leads] = np.fmin(self.low[leads], part.low)
        self.high[leads] = np.fmax(self.high[leads], part.high)


def reduce_block(
    values: np.ndarray,
    reduction: Reduction,
    points: np.ndarray | None,
    across: np.ndarray | None = None,
) -> Summary:
    """Reduce the members of a block.

    Parameters
    ----------
    values : (M, T, P) floats, NaN where there is no value
        A scalar, or the latitude (or x) of positions.
    reduction : Reduction
    points : (P,) int, increasing, or None
        Which points of the flattened grid these are; None means all of them.
    across : (M, T, P), for positions
        The longitude (or y).
    """
    members, leads, size = values.shape
    summary = empty_summary(reduction, members, leads, size)
    parts = [_part(region, points) for region in reduction.regions]
    single = [
        (summary.site_values, *located(reduction.sites, points)),
        (summary.sample_values, *located(reduction.sample, points)),
    ]
    for lead in range(leads):
        fields = [values[:, lead]]
        health = fields[0]
        if reduction.geometry is not None:
            assert across is not None
            health = whole_positions(fields[0], across[:, lead], reduction.geometry)
            fields = list(displacements(fields[0], across[:, lead], reduction.geometry))
        for kept, source, target in single:
            for component, field_values in enumerate(fields):
                kept[lead, :, target, component] = field_values[:, source].T
        present = note_health(summary, lead, health)
        if present.sum() < 2:
            continue
        if not present.all():
            fields = [field_values[present] for field_values in fields]
        _reduce_spread(summary, lead, np.flatnonzero(present), fields, parts)
        for number, distance in enumerate(reduction.beyond):
            _reduce_shares(summary, lead, number, present, fields, distance, parts)
    return summary


@dataclass(frozen=True)
class _Part:
    """The part of a region that lies in a window: positions there, and their weights."""

    position: np.ndarray
    weight: np.ndarray

    def within(self, first: int, stop: int) -> tuple[np.ndarray | slice, np.ndarray]:
        """Positions counted from ``first``, and weights, of the points before ``stop``."""
        low, high = np.searchsorted(self.position, [first, stop])
        weight = self.weight[low:high]
        if high - low == stop - first:
            return slice(None), weight
        return self.position[low:high] - first, weight


def _part(region: RegionWeights, points: np.ndarray | None) -> _Part:
    position, target = located(region.index, points)
    return _Part(position, region.weight[target])


def _reduce_spread(
    summary: Summary, lead: int, rows: np.ndarray, fields: list[np.ndarray], parts: list[_Part]
) -> None:
    """Variance at every point, and sums and inner products over regions, in one go."""
    size = fields[0].shape[1]
    grams = np.zeros((len(parts), rows.size, rows.size))
    for first in range(0, size, _SLAB):
        stop = min(first + _SLAB, size)
        deviations, count = component_deviations([values[:, first:stop] for values in fields])
        variance = variance_of(deviations, count)
        if summary.variance is not None:
            summary.variance[lead, first:stop] = variance
        for place, part in enumerate(parts):
            chosen, weight = part.within(first, stop)
            if weight.size == 0:
                continue
            local = variance[chosen].astype(float)
            known = np.isfinite(local)
            weight = np.where(known, weight, 0.0)
            summary.region_sum[lead, place] += weight @ np.where(known, local, 0.0)
            summary.region_weight[lead, place] += weight.sum()
            for deviation in deviations:
                scaled = deviation[:, chosen] * np.sqrt(weight).astype(deviation.dtype)
                grams[place] += scaled @ scaled.T
    summary.gram[lead][np.ix_(np.arange(len(parts)), rows, rows)] += grams


def _reduce_shares(
    summary: Summary,
    lead: int,
    number: int,
    present: np.ndarray,
    fields: list[np.ndarray],
    distance: float,
    parts: list[_Part],
) -> None:
    far = beyond_median(fields[0], distance, *fields[1:])
    count = np.isfinite(fields[0]).sum(axis=0)
    if summary.share is not None:
        with np.errstate(invalid="ignore", divide="ignore"):
            share = far.sum(axis=0) / count
        summary.share[number, lead] = np.where(count > 0, share, np.nan)
    rows = np.flatnonzero(present)
    for place, part in enumerate(parts):
        # Over the members there, so that the sum over members is the share, gaps or not.
        here = count[part.position]
        weight = np.where(here > 1, part.weight / np.maximum(here, 1), 0.0)
        summary.region_beyond[number, lead, place, rows] += far[:, part.position] @ weight


def empty_summary(reduction: Reduction, members: int, leads: int, size: int) -> Summary:
    """A summary with nothing in it yet."""
    regions, distances = len(reduction.regions), len(reduction.beyond)
    fields, components = reduction.fields, reduction.components
    sites, sample = reduction.sites.size, reduction.sample.size
    return Summary(
        variance=np.full((leads, size), np.nan, dtype=np.float32) if fields else None,
        share=np.full((distances, leads, size), np.nan, np.float32)
        if fields and distances
        else None,
        region_sum=np.zeros((leads, regions)),
        region_weight=np.zeros((leads, regions)),
        gram=np.zeros((leads, regions, members, members)),
        region_beyond=np.zeros((distances, leads, regions, members)),
        site_values=np.full((leads, members, sites, components), np.nan),
        sample_values=np.full((leads, members, sample, components), np.nan, dtype=np.float32),
        gaps=np.zeros((leads, members), dtype=np.int64),
        low=np.full((leads, members), np.nan),
        high=np.full((leads, members), np.nan),
    )


def note_health(summary: MemberFields, lead: int, values: np.ndarray) -> np.ndarray:
    """Note gaps and extremes of members (M, P) at a lead; tell (M,) which have any value."""
    low, high = values.min(axis=1), values.max(axis=1)  # NaN where a member has any gap
    broken = ~np.isfinite(low + high)
    if broken.any():
        gaps = np.zeros(values.shape, dtype=bool)
        gaps[broken] = ~np.isfinite(values[broken])
        summary.gaps[lead] = gaps.sum(axis=1)
        for member in np.flatnonzero(broken):
            finite = values[member][~gaps[member]]
            low[member], high[member] = (
                (finite.min(), finite.max()) if finite.size else (np.nan,) * 2
            )
    summary.low[lead], summary.high[lead] = low, high
    return np.asarray(np.isfinite(low))


def located(index: np.ndarray, points: np.ndarray | None) -> tuple[np.ndarray, np.ndarray]:
    """Positions of wanted points within a window, and which of the wanted they are."""
    if points is None:
        return index, np.arange(index.size)
    position = np.minimum(np.searchsorted(points, index), points.size - 1)
    target = np.flatnonzero(points[position] == index)
    return position[target], target
