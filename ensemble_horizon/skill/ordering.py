"""Members in order of size at every point: numpy kernel.

Some tens of members at many thousand points are many small sorts. A sorting network does them all
at once, an exchange being a minimum and a maximum of two rows, several times faster than a sort of
every column.
"""

from __future__ import annotations

from functools import lru_cache

import numpy as np

# Beyond so many rows the network has more exchanges than a sort of every column is worth.
_MOST_ROWS = 256


def ordered_rows(values: np.ndarray) -> list[np.ndarray]:
    """Rows of (M, P) floats, exchanged at every point until they increase from row to row.

    Parameters
    ----------
    values : (M, P) floats without NaN

    Returns
    -------
    list of M arrays (P,), the smallest first

    Notes
    -----
    Batcher's merge exchange (Knuth, The Art of Computer Programming, volume 3, section 5.2.2,
    algorithm M, from memory).

    Examples
    --------
    >>> [row.tolist() for row in ordered_rows(np.array([[3.0, 1.0], [2.0, 5.0], [1.0, 4.0]]))]
    [[1.0, 1.0], [2.0, 4.0], [3.0, 5.0]]
    """
    if values.shape[0] > _MOST_ROWS:
        return list(np.sort(values, axis=0))
    rows = list(values.copy())
    spare = np.empty(values.shape[1], dtype=values.dtype)
    for low, high in _exchanges(values.shape[0]):
        first, second = rows[low], rows[high]
        np.minimum(first, second, out=spare)
        np.maximum(first, second, out=second)
        rows[low], spare = spare, first
    return rows


@lru_cache(maxsize=16)
def _exchanges(size: int) -> tuple[tuple[int, int], ...]:
    found = []
    top = 1 << max((size - 1).bit_length() - 1, 0)
    run = top
    while run > 0:
        reach, offset, distance = top, 0, run
        while True:
            found += [(i, i + distance) for i in range(size - distance) if i & run == offset]
            if reach == run:
                break
            distance, reach, offset = reach - run, reach >> 1, run
        run >>= 1
    return tuple(found)
