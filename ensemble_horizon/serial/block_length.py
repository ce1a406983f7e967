"""Automatic length of the blocks by which dependent starts are resampled."""

from __future__ import annotations

from typing import NamedTuple

import numpy as np

from ensemble_horizon.serial.gaps import closed_up

_LEAST = 10


class BlockLengths(NamedTuple):
    """Lengths (K,) for two ways of resampling, in starts, not rounded; at most 3 sqrt(n), n / 3.

    Parameters
    ----------
    stationary : (K,) mean length of the blocks of `stationary_index`
    moving : (K,) length of blocks of one length: of `moving_block_index`
    """

    stationary: np.ndarray
    moving: np.ndarray


def block_lengths(values: np.ndarray) -> BlockLengths:
    """Length of blocks that gives K series the most accurate variance of their mean.

    ``(2 G^2 / D)^(1/3) n^(1/3)`` with ``G = sum h(k/m) |k| c_k`` and ``D`` a multiple of the
    squared spectrum at zero, both with the flat-top window h, whose width m is twice the lag after
    which autocorrelations are no longer significant.

    Parameters
    ----------
    values : (S, K) in order of time, NaN where a start is missing (see `closed_up`)

    Returns
    -------
    BlockLengths; NaN for series with fewer than ten values or without scatter. Round them up.

    Notes
    -----
    Politis and White 2004 (Econometric Reviews), corrected by Patton, Politis and White 2009; the
    constants that the papers leave open are those of the package arch.

    Examples
    --------
    >>> series = np.sin(np.arange(60.0))[:, np.newaxis]
    >>> block_lengths(series).moving.shape
    (1,)
    """
    stationary, moving = np.full((2, values.shape[1]), np.nan)
    for rows, dense in closed_up(values):
        if dense.shape[0] >= _LEAST:
            stationary[rows], moving[rows] = _lengths(dense)
    return BlockLengths(stationary, moving)


def _lengths(dense: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    number = dense.shape[0]
    departure = dense - dense.mean(axis=0)
    run = max(5, int(np.log10(number)))
    most = min(int(np.ceil(np.sqrt(number))) + run, number - 2)
    covariance = np.empty((most + 1, dense.shape[1]))
    size = np.empty_like(covariance)
    for lag in range(most + 1):
        cross = (departure[lag:] * departure[: number - lag]).sum(axis=0)
        covariance[lag] = cross / number
        # Squares of the two overlapping parts, a term short of them, as in arch.
        squares = (departure[lag + 1 :] ** 2).sum(axis=0)
        squares = squares * (departure[: number - lag - 1] ** 2).sum(axis=0)
        with np.errstate(invalid="ignore", divide="ignore"):
            size[lag] = np.abs(cross) / np.sqrt(squares)
    width = _window_width(size, run, most, 2 * np.sqrt(np.log10(number) / number))
    lags = np.arange(1, most + 1)[:, np.newaxis]
    window = np.clip(2 * (1 - lags / width), 0.0, 1.0)
    slope = 2 * (window * lags * covariance[1:]).sum(axis=0)
    spectrum = covariance[0] + 2 * (window * covariance[1:]).sum(axis=0)
    longest = np.ceil(min(3 * np.sqrt(number), number / 3))
    with np.errstate(invalid="ignore", divide="ignore"):
        ratio = np.where(covariance[0] > 0, 2 * slope**2 / spectrum**2, np.nan)
    found = [np.cbrt(ratio / factor * number) for factor in (2.0, 4.0 / 3.0)]
    return np.minimum(found[0], longest), np.minimum(found[1], longest)


def _window_width(size: np.ndarray, run: int, most: int, band: float) -> np.ndarray:
    """Twice the first lag from which ``run`` autocorrelations lie within the band."""
    within = np.concatenate([np.zeros((1, size.shape[1])), np.cumsum(size < band, axis=0)])
    calm = within[run:-1] - within[: -run - 1] == run
    first = np.where(calm.any(axis=0), np.argmax(calm, axis=0), most)
    return np.asarray(np.minimum(2 * np.maximum(first, 1), most))
