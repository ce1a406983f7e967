"""Resamples of dependent starts: blocks of successive starts are drawn, not single ones.

One index serves all series, places and leads, so that what belongs together is drawn together.
"""

from __future__ import annotations

import numpy as np

from ensemble_horizon.checks import require_positive
from ensemble_horizon.errors import ArgumentError


def moving_block_index(
    starts: int, length: float, repeats: int, seed: int | np.random.Generator
) -> np.ndarray:
    """Resamples by blocks of one length.

    Parameters
    ----------
    starts : int
    length : float
        Successive starts in a block, rounded up; `block_lengths` finds it.
    repeats : int
    seed : int or numpy Generator

    Returns
    -------
    (repeats, starts) int: positions of the starts of each resample.

    Raises
    ------
    ArgumentError
        if a number is not above zero or a block is longer than the series.

    Notes
    -----
    Künsch 1989 (Annals of Statistics). Blocks do not run round the end, so the first and the last
    starts are drawn a little less often than the others.

    Examples
    --------
    >>> moving_block_index(6, 3, 1, seed=0).tolist()
    [[3, 4, 5, 2, 3, 4]]
    """
    size = _block_size(starts, length, repeats)
    blocks = -(-starts // size)
    begin = np.random.default_rng(seed).integers(0, starts - size + 1, (repeats, blocks))
    index = begin[:, :, np.newaxis] + np.arange(size)
    return np.asarray(index.reshape(repeats, -1)[:, :starts])


def stationary_index(
    starts: int, length: float, repeats: int, seed: int | np.random.Generator
) -> np.ndarray:
    """Resamples by blocks of random, geometrically distributed length that run round the end.

    Parameters, returns and errors as in `moving_block_index`; ``length`` is the mean length and is
    not rounded.

    Notes
    -----
    Politis and Romano 1994 (Journal of the American Statistical Association).

    Examples
    --------
    >>> stationary_index(6, 3.0, 2, seed=0).shape
    (2, 6)
    """
    _block_size(starts, length, repeats)
    rng = np.random.default_rng(seed)
    index = np.empty((repeats, starts), dtype=np.int64)
    begin = rng.integers(0, starts, (repeats, starts))
    fresh = rng.random((repeats, starts)) < 1 / max(length, 1.0)
    index[:, 0] = begin[:, 0]
    for place in range(1, starts):
        following = (index[:, place - 1] + 1) % starts
        index[:, place] = np.where(fresh[:, place], begin[:, place], following)
    return index


def _block_size(starts: int, length: float, repeats: int) -> int:
    require_positive(starts, "starts")
    require_positive(repeats, "repeats")
    size = int(np.ceil(require_positive(length, "length")))
    if size > starts:
        raise ArgumentError(
            "length",
            expected=f"blocks of at most {starts} starts",
            found=f"{size}",
            remedy="give a shorter block, or more starts",
        )
    return size
