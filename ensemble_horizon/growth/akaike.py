"""The corrected Akaike information criterion."""

from __future__ import annotations

import numpy as np


def corrected_akaike(rss: np.ndarray, points: np.ndarray, parameters: int) -> np.ndarray:
    """AICc = n ln(RSS/n) + 2 k + 2 k (k + 1)/(n - k - 1), with k = parameters + 1.

    The noise variance counts as a parameter. Hurvich and Tsai (1989), Biometrika (from memory).

    Parameters
    ----------
    rss, points : array (N,)
        Residual sum of squares, and number n of points.
    parameters : int
        Number of parameters of the law.

    Returns
    -------
    array (N,)
        Infinite where n < k + 2, NaN where ``rss`` is NaN.

    Examples
    --------
    >>> corrected_akaike(np.array([10.0]), np.array([10]), 2)
    array([10.])
    """
    count = parameters + 1
    number = np.asarray(points, dtype=float)
    room = number - count - 1.0
    with np.errstate(divide="ignore", invalid="ignore"):
        value = number * np.log(rss / number) + 2.0 * count
        value = value + np.where(room > 0, 2.0 * count * (count + 1.0) / room, np.inf)
    return np.asarray(np.where(np.isnan(rss), np.nan, value))
