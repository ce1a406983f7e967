"""Are the ranks flat? A chi-square test that knows its counts are not independent.

Ranks at neighbouring points and of successive starts repeat one another, so Pearson's chi-square is
larger than its distribution says by the design effect, and differently so for each pattern of
departure. As Rao and Scott (1981, Journal of the American Statistical Association; 1984, Annals of
Statistics; from memory) do for surveys, the sum of squares is held against the covariance that the
starts themselves show: with V the covariance of the mean shares, ``X / tr V`` is close to F with
``d = (tr V)^2 / tr V^2`` degrees of freedom (Thomas and Rao 1987, same journal, from memory). Below
the line it has sqrt(d) times those that one variance has: between once, were one pattern all that
counts, and d times, were all alike. That gave the right share of rejections in simulations of 20
to 120 dependent starts.

The shares are taken apart into cosine patterns over the ranks: the first is a slope (bias), the
second bends at the ends (a spread too small, or too large). The variance of each pattern's mean is
that of `ensemble_horizon.serial.mean_noise`, which takes dependence between starts into account.
"""

from __future__ import annotations

from typing import Any, NamedTuple

import numpy as np
import xarray as xr
from scipy import special

from ensemble_horizon.checks import require_dimension
from ensemble_horizon.serial import REASON_ATTRIBUTES, mean_noise
from ensemble_horizon.serial.starts import in_order
from ensemble_horizon.vocabulary import RANK, START


class Flatness(NamedTuple):
    """Test of flat ranks of K series, each (K,).

    Parameters
    ----------
    chi_square : Pearson's statistic, as if counts were independent
    design_effect : how many times larger than its M degrees of freedom it is on average
    dof : independent patterns of departure that the starts show
    p_value : NaN unless the reason is ``given``
    starts, reason : as in `ensemble_horizon.serial.MeanNoise`
    """

    chi_square: np.ndarray
    design_effect: np.ndarray
    dof: np.ndarray
    p_value: np.ndarray
    starts: np.ndarray
    reason: np.ndarray


def rank_flatness(counts: xr.DataArray) -> xr.Dataset:
    """Test whether ranks are uniform, starts and places being dependent.

    Parameters
    ----------
    counts : DataArray (start, ..., rank)
        From `rank_counts`, ten starts or more.

    Returns
    -------
    Dataset without ``start`` and ``rank``: ``chi_square`` (Pearson's, as if all counts were
    independent), ``design_effect`` by which dependence makes it larger, ``dof``, ``p_value``,
    ``starts``, and ``interval_reason``, why there is no p-value where there is none.

    Raises
    ------
    ArgumentError
        if a dimension is missing, there is one start only, or one twice.

    Notes
    -----
    The method stands at the top of `ensemble_horizon.skill.flatness`. A reliable ensemble has flat
    ranks; flat ranks alone do not make it reliable (Hamill 2001, Monthly Weather Review).

    Examples
    --------
    >>> rng = np.random.default_rng(1)
    >>> counts = xr.DataArray(rng.multinomial(50, np.full(11, 1 / 11), 40), dims=("start", "rank"))
    >>> found = rank_flatness(counts)
    >>> bool(found.p_value > 0.05), float(found.starts)
    (True, 40.0)
    """
    require_dimension(counts, RANK, "counts")
    ordered = in_order(counts, START, "counts")
    rest = [name for name in counts.dims if name not in (START, RANK)]
    values = ordered.transpose(START, RANK, *rest).values.astype(float)
    shape = values.shape[2:]
    found = flatness(values.reshape(*values.shape[:2], -1))
    texts = {
        "chi_square": "chi-square of the ranks as if they were independent",
        "design_effect": "factor by which dependence enlarges chi-square",
        "dof": "degrees of freedom of the departures from flat ranks",
        "p_value": "p-value of flat ranks",
        "starts": "starts that have data",
    }
    data: dict[str, Any] = {
        name: (rest, getattr(found, name).reshape(shape), {"long_name": text, "units": "1"})
        for name, text in texts.items()
    }
    data["interval_reason"] = (rest, found.reason.reshape(shape), dict(REASON_ATTRIBUTES))
    coords = {
        name: coord for name, coord in ordered.coords.items() if not {START, RANK} & set(coord.dims)
    }
    return xr.Dataset(data, coords=coords)


def flatness(counts: np.ndarray) -> Flatness:
    """Test K series of counts (S, M + 1, K) for flat ranks: numpy kernel.

    A start without counts, or NaN, is missing.

    Examples
    --------
    >>> counts = np.random.default_rng(0).multinomial(90, [0.4, 0.2, 0.4], 30)[..., np.newaxis]
    >>> bool(flatness(counts.astype(float)).p_value[0] < 1e-3)
    True
    """
    starts, number, series = counts.shape
    total = counts.sum(axis=1)
    known = total > 0
    size = np.where(known, total, 0.0).sum(axis=0)
    here = np.maximum(known.sum(axis=0), 1)
    with np.errstate(invalid="ignore", divide="ignore"):
        # Scaled to the mean size of a start, their mean is the share over all starts.
        share = np.where(known[:, np.newaxis], counts, np.nan) / (size / here)
    patterns = np.einsum("pr,srk->spk", _cosines(number), share)
    noise = mean_noise(patterns.reshape(starts, -1))
    variance, variance_dof = (
        part.reshape(number - 1, series) for part in (noise.variance, noise.dof)
    )
    mean = np.where(known[:, np.newaxis], patterns, 0.0).sum(axis=0) / here
    sum_squares = (mean**2).sum(axis=0)
    # A pattern that never varied has no variance to speak of, and no part in the sum.
    whole = np.nansum(variance, axis=0)
    with np.errstate(invalid="ignore", divide="ignore"):
        dof = _pattern_dof(patterns, known, variance, variance_dof)
        denominator = np.nansum(variance * variance_dof, axis=0) / whole * np.sqrt(dof)
        p_value = special.fdtrc(dof, denominator, sum_squares / whole)
        chi_square = number * size * sum_squares
        effect = whole * number * size / (number - 1)
    reason = noise.reason.reshape(number - 1, series).min(axis=0)
    silent = reason != 0
    dof, effect, p_value = (np.where(silent, np.nan, item) for item in (dof, effect, p_value))
    return Flatness(chi_square, effect, dof, p_value, known.sum(axis=0), reason)


def _cosines(number: int) -> np.ndarray:
    """Orthonormal cosine patterns (M, M + 1) over the ranks, but for the constant one."""
    order, rank = np.arange(1, number)[:, np.newaxis], np.arange(number)
    return np.asarray(np.sqrt(2 / number) * np.cos(np.pi * order * (2 * rank + 1) / (2 * number)))


def _pattern_dof(
    patterns: np.ndarray, known: np.ndarray, variance: np.ndarray, variance_dof: np.ndarray
) -> np.ndarray:
    """(tr V)^2 / tr V^2 (K,) of the covariance V of the mean of patterns (S, M, K).

    Successive starts keep a slope longer than finer patterns, so the variances of the means stand
    on the diagonal of V, not those between starts; these give the correlations of patterns. Both
    are freed of what their own noise adds to their squares.
    """
    square = np.nansum(variance**2 / (1 + 2 / variance_dof), axis=0)
    for place in range(patterns.shape[2]):
        rows = patterns[known[:, place], :, place]
        varying = variance[:, place] > 0
        n = rows.shape[0] - 1
        if n < 2 or varying.sum() < 2:
            continue
        correlation = np.corrcoef(rows[:, varying], rowvar=False)
        shared = (correlation**2 - 1 / n) / (1 - 1 / n)
        np.fill_diagonal(shared, 0.0)
        own = variance[varying, place]
        square[place] += max(own @ shared @ own, 0.0)
    with np.errstate(invalid="ignore", divide="ignore"):
        return np.clip(np.nansum(variance, axis=0) ** 2 / square, 1.0, patterns.shape[1])
