"""Series with gaps, closed up and taken in blocks of equal length."""

from __future__ import annotations

from collections.abc import Iterator

import numpy as np

# So many series at a time: memory stays flat however many grid points a map has.
_COLUMNS = 4096


def closed_up(values: np.ndarray) -> Iterator[tuple[np.ndarray, np.ndarray]]:
    """Yield positions (B,) of series and their values (n, B) without gaps, n alike in a block.

    Parameters
    ----------
    values : (S, K) in order of time, NaN where a start is missing

    Notes
    -----
    A start that has no value is passed over, and the starts to both sides of it become
    neighbours. Their dependence across the gap is then overstated, never left out.

    Examples
    --------
    >>> series = np.array([[1.0, 4.0], [np.nan, 5.0], [3.0, 6.0]])
    >>> [(rows.tolist(), dense.tolist()) for rows, dense in closed_up(series)]
    [([0], [[1.0], [3.0]]), ([1], [[4.0], [5.0], [6.0]])]
    """
    known = np.isfinite(values)
    count = known.sum(axis=0)
    for number in np.unique(count[count > 0]):
        rows = np.flatnonzero(count == number)
        for first in range(0, rows.size, _COLUMNS):
            block = rows[first : first + _COLUMNS]
            dense = values[:, block].astype(float)
            if number < values.shape[0]:
                order = np.argsort(~known[:, block], axis=0, kind="stable")[:number]
                dense = np.take_along_axis(dense, order, axis=0)
            yield block, dense
