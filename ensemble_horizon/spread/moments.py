"""Moments over members: numpy kernels, no labels."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np

# Points handled at once: members x slab x 4 bytes should stay inside a core's own cache.
_SLAB = 8192


def member_variance(*parts: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """Variance over members with divisor M - 1, and the number of members it rests on.

    Parameters
    ----------
    *parts : (M, ...) floats, NaN where a member has no value
        The values of a scalar, or the two components of displacements from a mean position.

    Returns
    -------
    variance : (...) NaN where fewer than two members have a value
    count : (...) int16

    Notes
    -----
    ``s2 = sum (x_m - mean)^2 / (M - 1)``. The first member is subtracted before anything is
    summed, so that single-precision input keeps the digits of a small spread about a large mean.
    Of displacements, ``s2 = sum (east_m^2 + north_m^2) / (M - 1)``.

    Examples
    --------
    >>> variance, count = member_variance(np.array([[1.0], [2.0], [4.0]]))
    >>> float(variance[0]), int(count[0])
    (2.333..., 3)
    """
    shape = parts[0].shape[1:]
    flat = [part.reshape(part.shape[0], -1) for part in parts]
    size = flat[0].shape[1]
    variance = np.empty(size, dtype=flat[0].dtype)
    count = np.empty(size, dtype=np.int16)
    for first in range(0, size, _SLAB):
        piece = slice(first, first + _SLAB)
        deviation, number = component_deviations([part[:, piece] for part in flat])
        count[piece] = number
        variance[piece] = variance_of(deviation, number)
    return variance.reshape(shape), count.reshape(shape)


def component_deviations(parts: Sequence[np.ndarray]) -> tuple[list[np.ndarray], np.ndarray]:
    """Deviations of each component, and the count of members, as `member_deviations` has them.

    Parameters
    ----------
    parts : one (M, P) array of a scalar, or two of displacements, which are deviations already
    """
    if len(parts) == 1:
        deviation, count = member_deviations(parts[0])
        return [deviation], count
    present = np.isfinite(parts[0])
    return [np.where(present, part, 0) for part in parts], present.sum(axis=0).astype(np.int16)


def variance_of(deviations: Sequence[np.ndarray], count: np.ndarray) -> np.ndarray:
    """Variance (P,) from the deviations (M, P) of each component; NaN where there are too few."""
    with np.errstate(invalid="ignore", divide="ignore"):
        total = np.einsum("mp,mp->p", deviations[0], deviations[0])
        for part in deviations[1:]:
            total += np.einsum("mp,mp->p", part, part)
        return np.where(count > 1, total / (count - 1), np.nan)


def member_deviations(values: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """Deviations from the member mean and the count of finite members, along axis 0.

    Parameters
    ----------
    values : (M, P) floats, NaN where a member has no value

    Returns
    -------
    deviation : (M, P) zero where a member has no value, so that sums may run over all members
    count : (P,) int16

    Examples
    --------
    >>> deviation, count = member_deviations(np.array([[1.0], [np.nan], [4.0]]))
    >>> deviation.ravel().tolist(), count.tolist()
    ([-1.5, 0.0, 1.5], [2])
    """
    members = values.shape[0]
    shift = values[0]
    deviation = values - shift
    mean = deviation.sum(axis=0)
    if np.isfinite(mean).all():
        mean /= members
        deviation -= mean
        return deviation, np.full(values.shape[1], members, dtype=np.int16)
    return _deviations_with_gaps(values)


def _deviations_with_gaps(values: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    present = np.isfinite(values)
    count = present.sum(axis=0).astype(np.int16)
    first = np.argmax(present, axis=0)
    shift = np.take_along_axis(values, first[np.newaxis], axis=0)[0]
    deviation = np.where(present, values - shift, 0)
    mean = deviation.sum(axis=0) / np.maximum(count, 1).astype(values.dtype)
    deviation = np.where(present, deviation - mean, 0)
    return deviation.astype(values.dtype, copy=False), count


def beyond_median(
    values: np.ndarray, distance: float, across: np.ndarray | None = None
) -> np.ndarray:
    """Which members lie further than ``distance`` from the median of the members.

    Parameters
    ----------
    values : (M, P) floats, NaN where a member has no value
    distance : float, in the units of ``values``
    across : (M, P), optional
        Where ``values`` are one component of displacements from a mean position, the other one.
        The median position is the one whose components are the medians of each; distances from it
        are straight on the map of the displacements. One member gone far astray does not move it.

    Returns
    -------
    (M, P) bool; False where a member has no value

    Examples
    --------
    >>> beyond_median(np.array([[0.0], [1.0], [5.0]]), 2.0).ravel().tolist()
    [False, False, True]
    """
    away = values - _member_median(values)
    length = np.abs(away) if across is None else np.hypot(away, across - _member_median(across))
    return np.asarray(length > distance)


def _member_median(values: np.ndarray) -> np.ndarray:
    if np.isfinite(values).all():
        return np.asarray(np.median(values, axis=0))
    ordered = np.sort(values, axis=0)  # NaN last
    count = np.isfinite(values).sum(axis=0)
    low = np.maximum((count - 1) // 2, 0)
    high = np.maximum(count // 2, 0)
    high = np.minimum(high, np.maximum(count - 1, 0))
    pick = np.stack([low, high])
    return np.asarray(np.take_along_axis(ordered, pick, axis=0).mean(axis=0))
