"""Moments over members: numpy kernels, no labels."""

from __future__ import annotations

import numpy as np

# Points handled at once: members x slab x 4 bytes should stay inside a core's own cache.
_SLAB = 8192


def member_variance(values: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """Variance over members with divisor M - 1, and the number of members it rests on.

    Parameters
    ----------
    values : (M, ...) floats, NaN where a member has no value

    Returns
    -------
    variance : (...) NaN where fewer than two members have a value
    count : (...) int16

    Notes
    -----
    ``s2 = sum (x_m - mean)^2 / (M - 1)``. The first member is subtracted before anything is
    summed, so that single-precision input keeps the digits of a small spread about a large mean.

    Examples
    --------
    >>> variance, count = member_variance(np.array([[1.0], [2.0], [4.0]]))
    >>> float(variance[0]), int(count[0])
    (2.333..., 3)
    """
    shape = values.shape[1:]
    flat = values.reshape(values.shape[0], -1)
    variance = np.empty(flat.shape[1], dtype=flat.dtype)
    count = np.empty(flat.shape[1], dtype=np.int16)
    for first in range(0, flat.shape[1], _SLAB):
        piece = slice(first, first + _SLAB)
        deviation, number = member_deviations(flat[:, piece])
        count[piece] = number
        with np.errstate(invalid="ignore", divide="ignore"):
            total = np.einsum("mp,mp->p", deviation, deviation)
            variance[piece] = np.where(number > 1, total / (number - 1), np.nan)
    return variance.reshape(shape), count.reshape(shape)


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


def beyond_median(values: np.ndarray, distance: float) -> np.ndarray:
    """Which members lie further than ``distance`` from the median of the members.

    Parameters
    ----------
    values : (M, P) floats, NaN where a member has no value
    distance : float, in the units of ``values``

    Returns
    -------
    (M, P) bool; False where a member has no value

    Examples
    --------
    >>> beyond_median(np.array([[0.0], [1.0], [5.0]]), 2.0).ravel().tolist()
    [False, False, True]
    """
    if np.isfinite(values).all():
        middle = np.median(values, axis=0)
    else:
        ordered = np.sort(values, axis=0)  # NaN last
        count = np.isfinite(values).sum(axis=0)
        low = np.maximum((count - 1) // 2, 0)
        high = np.maximum(count // 2, 0)
        high = np.minimum(high, np.maximum(count - 1, 0))
        pick = np.stack([low, high])
        middle = np.take_along_axis(ordered, pick, axis=0).mean(axis=0)
    return np.asarray(np.abs(values - middle) > distance)
