"""Rank of the analysis among the members: kernels and labelled fronts."""

from __future__ import annotations

from collections.abc import Hashable
from typing import NamedTuple

import numpy as np
import xarray as xr

from ensemble_horizon.checks import require_dimension
from ensemble_horizon.skill.alignment import aligned, over_members
from ensemble_horizon.skill.averages import average, space_weights
from ensemble_horizon.spread.places import Region
from ensemble_horizon.vocabulary import LATITUDE, LONGITUDE, MEMBER, RANK


def rank_counts(
    ensemble: xr.DataArray,
    analysis: xr.DataArray,
    *,
    seed: int = 0,
    region: Region | None = None,
    area: xr.DataArray | None = None,
) -> xr.DataArray:
    """How often the analysis takes each rank among the members, start by start.

    Parameters
    ----------
    ensemble : DataArray (start, lead, member, *space), each dimension but ``member`` optional
    analysis : DataArray on the dimensions of the ensemble without ``member``, or on ``valid``
    seed : int
        Of the random draws where the analysis equals members.
    region : Region, optional
        Count over its points, by area; over the whole field where none is given.
    area : DataArray (*space), optional
        Cell areas; cos(latitude) where none are given.

    Returns
    -------
    DataArray (start, lead, rank) with the M + 1 ranks from 0, below all members, to M. Area weights
    are scaled so that a start without gaps counts as many as there are points. Lazy where the input
    is lazy, and the same however it is chunked.

    Raises
    ------
    ArgumentError
        if there is no ``member`` dimension, or the analysis is in other units, on another grid or
        at other times.

    Notes
    -----
    Of a reliable ensemble the ranks are uniform: 1/(M + 1) each. Ties are broken at random (Hamill
    2001, Monthly Weather Review, from memory). Where some members lack a value the rank among the
    n + 1 that are left is spread at random over the M + 1, which keeps uniform ranks uniform.

    Examples
    --------
    >>> ensemble = xr.DataArray([[0.0, 1.0, 2.0], [0.0, 1.0, 2.0]], dims=("start", "member"))
    >>> rank_counts(ensemble, xr.DataArray([-5.0, 1.5], dims="start")).values.tolist()
    [[1.0, 0.0, 0.0, 0.0], [0.0, 0.0, 1.0, 0.0]]
    """
    require_dimension(ensemble, MEMBER, "ensemble")
    weights = xr.DataArray(1.0)
    space: list[str] = []
    if region is not None or {LATITUDE, LONGITUDE} <= set(ensemble.coords):
        weights = space_weights(ensemble, region or Region("domain"), area)
        weights = weights * int((weights > 0).sum())
        space = [str(name) for name in weights.dims]
    truth = aligned(ensemble, analysis)
    members = ensemble.sizes[MEMBER]
    whole = ensemble.drop_vars([str(name) for name in space], errors="ignore")
    if whole.chunks:
        whole = whole.chunk(dict.fromkeys((MEMBER, *space), -1))
    if truth.chunks:
        truth = truth.chunk(dict.fromkeys(space, -1))
    fields = [name for name in ensemble.dims if name != MEMBER and name not in space]
    counts = xr.apply_ufunc(
        _counts_last,
        whole,
        truth,
        weights,
        _numbers(ensemble, fields),
        kwargs={"seed": seed},
        input_core_dims=[[MEMBER, *space], space, space, []],
        output_core_dims=[[RANK]],
        join="override",
        dask="parallelized",
        dask_gufunc_kwargs={"output_sizes": {RANK: members + 1}},
        output_dtypes=[float],
    )
    return counts.rename("rank_counts").assign_attrs(
        long_name="counts of the rank of the analysis among the members", units="1"
    )


def outside_share(
    ensemble: xr.DataArray,
    analysis: xr.DataArray,
    *,
    over_starts: bool = True,
    region: Region | None = None,
    area: xr.DataArray | None = None,
) -> xr.Dataset:
    """Share of analyses that lie outside the range of the members.

    Parameters, and errors raised, as in `spread_error_ratio`.

    Returns
    -------
    Dataset with ``outside``, units "1", and ``expected``, ``2/(M + 1)`` with M the members that
    have a value. An analysis on the edge of the range counts by the chance that ties at random give
    it: of k members that equal it, 1 in k + 1.

    Examples
    --------
    >>> ensemble = xr.DataArray([[0.0, 1.0, 2.0], [0.0, 1.0, 2.0]], dims=("start", "member"))
    >>> found = outside_share(ensemble, xr.DataArray([-5.0, 1.5], dims="start"))
    >>> float(found.outside), float(found.expected)
    (0.5, 0.5)
    """
    require_dimension(ensemble, MEMBER, "ensemble")
    error = (ensemble - aligned(ensemble, analysis)).transpose(..., MEMBER)
    outside = over_members(_outside_last, error)
    count = error.notnull().sum(MEMBER)
    expected = (2 / (count + 1)).where(count > 0)
    found = {
        "outside": ("share of analyses outside the range of the members", outside),
        "expected": ("share expected of a reliable ensemble", expected),
    }
    return xr.Dataset(
        {
            name: average(field, over_starts=over_starts, region=region, area=area).assign_attrs(
                long_name=text, units="1"
            )
            for name, (text, field) in found.items()
        }
    )


class Sides(NamedTuple):
    """Members on either side of the analysis at P points.

    Parameters
    ----------
    below, equal : (P,) int, members below the analysis, and equal to it
    present : (P,) int, members that have a value
    """

    below: np.ndarray
    equal: np.ndarray
    present: np.ndarray


def sides(departure: np.ndarray, present: np.ndarray | None = None) -> Sides:
    """Count the members (M, P), minus the analysis, by the side on which they lie: numpy kernel.

    ``present`` (P,), the members that have a value, is counted where it is not given.
    """
    # Sums of one kind of number are several times faster than sums of truth values.
    small = departure.shape[0] < 128

    def number(which: np.ndarray) -> np.ndarray:
        if small:
            return np.asarray(np.add.reduce(which.view(np.int8), axis=0, dtype=np.int8))
        return np.asarray(np.add.reduce(which, axis=0, dtype=np.int64))

    if present is None:
        present = number(np.isfinite(departure))
    return Sides(number(departure < 0), number(departure == 0), present)


def ranks(found: Sides, members: int, generator: np.random.Generator) -> np.ndarray:
    """Rank (P,) of the analysis among M members: numpy kernel.

    Returns
    -------
    (P,) int from 0 to M; -1 where there is no member or no analysis

    Examples
    --------
    >>> departure = np.array([[-1.0, np.nan], [2.0, np.nan]])
    >>> ranks(sides(departure), 2, np.random.default_rng(0)).tolist()
    [1, -1]
    """
    below, equal, count = found
    rank = below.astype(np.int64)
    tied = np.flatnonzero(equal)
    rank[tied] += (generator.random(tied.size) * (equal[tied] + 1.0)).astype(np.int64)
    short = np.flatnonzero(count < members)
    if short.size:
        place = (rank[short] + generator.random(short.size)) / (count[short] + 1.0)
        spread_out = np.minimum((place * (members + 1)).astype(np.int64), members)
        rank[short] = np.where(count[short] > 0, spread_out, -1)
    return rank


def spread_over(counts: np.ndarray, members: int) -> np.ndarray:
    """Counts (..., m + 1) by the rank among m members, over the M + 1 ranks of more: numpy kernel.

    Each rank is spread evenly over those that it covers, which keeps uniform ranks uniform; in
    `ranks` a single one is put there at random.

    Examples
    --------
    >>> spread_over(np.array([2.0, 4.0]), 3).tolist()
    [1.0, 1.0, 2.0, 2.0]
    """
    own = counts.shape[-1]
    if own == members + 1:
        return counts
    ends = [np.linspace(0.0, 1.0, number + 1) for number in (own, members + 1)]
    low = np.maximum(ends[0][:-1, np.newaxis], ends[1][:-1])
    high = np.minimum(ends[0][1:, np.newaxis], ends[1][1:])
    return counts @ (own * np.maximum(high - low, 0.0))


def outside(found: Sides) -> np.ndarray:
    """Chance (P,) that the analysis takes the lowest or highest rank: 0 or 1 but for ties.

    Examples
    --------
    >>> outside(sides(np.array([[-1.0, 0.0], [-2.0, 2.0]]))).tolist()
    [1.0, 0.5]
    """
    below, equal, count = found
    chance = ((below == 0) | (below == count)).astype(float)
    tied = np.flatnonzero(equal)
    edges = (below[tied] == 0).astype(float) + (below[tied] + equal[tied] == count[tied])
    chance[tied] = edges / (equal[tied] + 1.0)
    chance[count == 0] = np.nan
    return chance


def _outside_last(error: np.ndarray) -> np.ndarray:
    front = np.moveaxis(error, -1, 0)
    kind = np.result_type(error.dtype, np.float32)
    return outside(sides(front.reshape(front.shape[0], -1))).reshape(front.shape[1:]).astype(kind)


def _numbers(ensemble: xr.DataArray, fields: list[Hashable]) -> xr.DataArray:
    """A number for every field, so that its random draws do not hang on how it was chunked."""
    shape = [ensemble.sizes[name] for name in fields]
    numbers = xr.DataArray(np.arange(np.prod(shape, dtype=int)).reshape(shape), dims=fields)
    if ensemble.chunks:
        numbers = numbers.chunk({name: ensemble.chunksizes[name] for name in fields})
    return numbers


def _counts_last(
    values: np.ndarray,
    truth: np.ndarray,
    weights: np.ndarray,
    numbers: np.ndarray,
    *,
    seed: int,
) -> np.ndarray:
    """Counts (..., M + 1) of fields (..., M, *space), each of them seeded by its own number."""
    lead_shape = numbers.shape
    size = max(weights.size, 1)
    members = values.shape[len(lead_shape)]
    values = values.reshape(-1, members, size)
    truth = np.broadcast_to(truth, lead_shape + weights.shape).reshape(-1, size)
    found = np.zeros((values.shape[0], members + 1))
    for row, number in enumerate(numbers.ravel()):
        departure = values[row] - truth[row]
        rank = ranks(sides(departure), members, np.random.default_rng([seed, int(number)]))
        known = rank >= 0
        found[row] = np.bincount(rank[known], weights.ravel()[known], members + 1)
    return found.reshape(*lead_shape, members + 1)
