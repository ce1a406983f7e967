"""Long-run variance: what the variance of a mean over dependent starts rests on."""

from __future__ import annotations

import numpy as np

from ensemble_horizon.serial.gaps import closed_up


def long_run_variance(values: np.ndarray, lags: int | None = None) -> np.ndarray:
    """Long-run variance of K series, Bartlett-weighted.

    ``c_0 + 2 sum_k (1 - k / (lags + 1)) c_k``, with ``c_k = sum_t d_t d_(t-k) / n`` and ``d`` the
    departure from the mean; divided by n it is the variance of the mean.

    Parameters
    ----------
    values : (S, K) in order of time, NaN where a start is missing (see `closed_up`)
    lags : int, optional
        ``4 (n / 100)^(2/9)`` where none is given, as is common practice.

    Returns
    -------
    (K,) in squared units of the values; NaN for a series without a value.

    Notes
    -----
    Newey and West 1987 (Econometrica). Together with normal quantiles it rejects far too often on
    fewer than some hundred starts: `serial_mean` is the test to use.

    Examples
    --------
    >>> long_run_variance(np.array([[1.0], [2.0], [3.0], [4.0]]), lags=1).tolist()
    [1.5625]
    """
    variance = np.full(values.shape[1], np.nan)
    for rows, dense in closed_up(values):
        number = dense.shape[0]
        reach = int(4 * (number / 100) ** (2 / 9)) if lags is None else lags
        departure = dense - dense.mean(axis=0)
        total = (departure**2).sum(axis=0)
        for lag in range(1, min(reach, number - 1) + 1):
            cross = (departure[lag:] * departure[:-lag]).sum(axis=0)
            total += 2 * (1 - lag / (reach + 1)) * cross
        variance[rows] = total / number
    return variance


def effective_size(values: np.ndarray, lags: int | None = None) -> np.ndarray:
    """Number of independent starts that K series (S, K) are worth: n c_0 / long-run variance.

    Parameters as in `long_run_variance`. NaN for a series without a value or without scatter.

    Examples
    --------
    >>> effective_size(np.array([[1.0], [2.0], [3.0], [4.0]]), lags=1).tolist()
    [3.2]
    """
    count = np.isfinite(values).sum(axis=0)
    with np.errstate(invalid="ignore", divide="ignore"):
        return np.asarray(
            count * long_run_variance(values, lags=0) / long_run_variance(values, lags)
        )
