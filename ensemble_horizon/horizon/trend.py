"""Whether a curve grows at all: the trend of ln(spread) over the run."""

from __future__ import annotations

import numpy as np

# Below a tenth over the whole run the members are as far apart at the end as at the start.
LEAST_GROWTH = 1.1
_NORMAL_95 = 1.6449


def grows(lead: np.ndarray, curves: np.ndarray, covariance: np.ndarray | None = None) -> np.ndarray:
    """Whether N curves grow over the run.

    Parameters
    ----------
    lead : (L,) increasing
    curves : (L, N) spread or error; NaN and zero are left out, as they have no logarithm
    covariance : (L, L), optional
        Sampling covariance of ln(spread) between leads. Where it is given, the trend must stand
        clear of its own sampling error (one-sided, 5 percent).

    Returns
    -------
    (N,) bool: the least-squares line through ln(spread) rises by at least a tenth over the run.
    A curve that starts from zero and leaves it grows.

    Examples
    --------
    >>> lead = np.arange(5.0)
    >>> grows(lead, np.stack([np.exp(0.2 * lead), np.exp(-0.2 * lead)], axis=1)).tolist()
    [True, False]
    """
    with np.errstate(invalid="ignore", divide="ignore"):
        logs = np.where(curves > 0, np.log(curves), np.nan)
    known = np.isfinite(logs)
    count = known.sum(axis=0)
    weight = known / np.maximum(count, 1)
    center = (weight * lead[:, np.newaxis]).sum(axis=0)
    distance = np.where(known, lead[:, np.newaxis] - center, 0.0)
    square = (distance**2).sum(axis=0)
    with np.errstate(invalid="ignore", divide="ignore"):
        slope = (distance * np.where(known, logs, 0.0)).sum(axis=0) / square
    run = np.where(known, lead[:, np.newaxis], -np.inf).max(axis=0)
    run = run - np.where(known, lead[:, np.newaxis], np.inf).min(axis=0)
    rises = (count >= 2) & (slope * run >= np.log(LEAST_GROWTH))
    if covariance is not None:
        with np.errstate(invalid="ignore", divide="ignore"):
            pull = distance / square
            error = np.sqrt(np.einsum("ln,lk,kn->n", pull, covariance, pull, optimize=True))
            rises &= slope > _NORMAL_95 * error
    first = np.argmax(np.isfinite(curves), axis=0)
    from_zero = np.take_along_axis(curves, first[np.newaxis], axis=0)[0] == 0
    return np.asarray(rises | (from_zero & (count >= 1) & (np.nan_to_num(slope) >= 0)))


def share_grows(lead: np.ndarray, shares: np.ndarray) -> np.ndarray:
    """Whether N curves of probabilities do not fall: zero throughout counts as not fallen.

    Parameters
    ----------
    lead : (L,) increasing
    shares : (L, N) probabilities, NaN where there is no value
    """
    known = np.isfinite(shares)
    count = np.maximum(known.sum(axis=0), 1)
    center = (known * lead[:, np.newaxis]).sum(axis=0) / count
    distance = np.where(known, lead[:, np.newaxis] - center, 0.0)
    slope = (distance * np.nan_to_num(shares)).sum(axis=0)
    return np.asarray((slope > 0) | (np.nan_to_num(shares).max(axis=0) == 0))
