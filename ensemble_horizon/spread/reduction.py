"""One block of members reduced where it was read.

A block is one start, a few leads and all members over one window of the grid. Nothing of the size
of the ensemble leaves `reduce_block`: fields of spread variance, weighted sums for regions, the
members' values at sites and at a thin sample of points.
"""

from __future__ import annotations

from dataclasses import dataclass, field

import numpy as np

from ensemble_horizon.spread.moments import beyond_median, member_deviations

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
    """

    size: int
    regions: tuple[RegionWeights, ...] = ()
    sites: np.ndarray = field(default_factory=lambda: np.empty(0, dtype=int))
    sample: np.ndarray = field(default_factory=lambda: np.empty(0, dtype=int))
    beyond: tuple[float, ...] = ()
    fields: bool = True


@dataclass
class Summary:
    """What is left of T leads, M members, P points; R regions, A distances, S sites, K samples."""

    variance: np.ndarray | None  # (T, P)
    share: np.ndarray | None  # (A, T, P) share of members beyond the distance
    region_sum: np.ndarray  # (T, R) sum of weight x variance over points with a value
    region_weight: np.ndarray  # (T, R) sum of those weights
    gram: np.ndarray  # (T, R, M, M) weighted inner products of member deviations
    region_beyond: np.ndarray  # (A, T, R, M) weights where a member is beyond, over members there
    site_values: np.ndarray  # (T, M, S)
    sample_values: np.ndarray  # (T, M, K)
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


def reduce_block(values: np.ndarray, reduction: Reduction, points: np.ndarray | None) -> Summary:
    """Reduce the members of a block.

    Parameters
    ----------
    values : (M, T, P) floats, NaN where there is no value
    reduction : Reduction
    points : (P,) int, increasing, or None
        Which points of the flattened grid these are; None means all of them.
    """
    members, leads, size = values.shape
    summary = empty_summary(reduction, members, leads, size)
    site_from, site_to = _locate(reduction.sites, points)
    sample_from, sample_to = _locate(reduction.sample, points)
    parts = [_part(region, points) for region in reduction.regions]
    for lead in range(leads):
        field_values = values[:, lead]
        summary.site_values[lead][:, site_to] = field_values[:, site_from]
        summary.sample_values[lead][:, sample_to] = field_values[:, sample_from]
        present = _note_health(summary, lead, field_values)
        if present.sum() < 2:
            continue
        kept = field_values if present.all() else field_values[present]
        _reduce_spread(summary, lead, np.flatnonzero(present), kept, parts)
        for number, distance in enumerate(reduction.beyond):
            _reduce_shares(summary, lead, number, present, kept, distance, parts)
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
    position, target = _locate(region.index, points)
    return _Part(position, region.weight[target])


def _reduce_spread(
    summary: Summary, lead: int, rows: np.ndarray, values: np.ndarray, parts: list[_Part]
) -> None:
    """Variance at every point, and sums and inner products over regions, in one go."""
    size = values.shape[1]
    grams = np.zeros((len(parts), rows.size, rows.size))
    for first in range(0, size, _SLAB):
        stop = min(first + _SLAB, size)
        deviation, count = member_deviations(values[:, first:stop])
        with np.errstate(invalid="ignore", divide="ignore"):
            total = np.einsum("mp,mp->p", deviation, deviation)
            variance = np.where(count > 1, total / (count - 1), np.nan)
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
            scaled = deviation[:, chosen] * np.sqrt(weight).astype(deviation.dtype)
            grams[place] += scaled @ scaled.T
    summary.gram[lead][np.ix_(np.arange(len(parts)), rows, rows)] += grams


def _reduce_shares(
    summary: Summary,
    lead: int,
    number: int,
    present: np.ndarray,
    values: np.ndarray,
    distance: float,
    parts: list[_Part],
) -> None:
    far = beyond_median(values, distance)
    count = np.isfinite(values).sum(axis=0)
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
    fields = reduction.fields
    return Summary(
        variance=np.full((leads, size), np.nan, dtype=np.float32) if fields else None,
        share=np.full((distances, leads, size), np.nan, np.float32)
        if fields and distances
        else None,
        region_sum=np.zeros((leads, regions)),
        region_weight=np.zeros((leads, regions)),
        gram=np.zeros((leads, regions, members, members)),
        region_beyond=np.zeros((distances, leads, regions, members)),
        site_values=np.full((leads, members, reduction.sites.size), np.nan),
        sample_values=np.full((leads, members, reduction.sample.size), np.nan, dtype=np.float32),
        gaps=np.zeros((leads, members), dtype=np.int64),
        low=np.full((leads, members), np.nan),
        high=np.full((leads, members), np.nan),
    )


def _note_health(summary: Summary, lead: int, values: np.ndarray) -> np.ndarray:
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


def _locate(index: np.ndarray, points: np.ndarray | None) -> tuple[np.ndarray, np.ndarray]:
    """Positions of wanted points within a window, and which of the wanted they are."""
    if points is None:
        return index, np.arange(index.size)
    position = np.minimum(np.searchsorted(points, index), points.size - 1)
    target = np.flatnonzero(points[position] == index)
    return position[target], target
