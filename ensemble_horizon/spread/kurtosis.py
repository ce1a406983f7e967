"""Tails of the members' distribution, pooled over places and leads."""

from __future__ import annotations

import numpy as np


def pooled_kurtosis(values: np.ndarray) -> float:
    """Excess kurtosis of members pooled over leads and points; zero unless clearly above it.

    Parameters
    ----------
    values : (L, M, K) members at K points, or (L, M, K, C) of C components, each a point

    Notes
    -----
    The fourth cumulant over the square of the second, both from Fisher's unbiased k-statistics
    summed over points: a ratio of sums, as the mean of ratios from few members misses heavy tails.
    From 20 Gaussian members one point scatters by sqrt(24/20); as leads and neighbouring points
    repeat one another, only one point in four and no lead counts towards the precision of the mean.
    """
    values = _complete_members(values.reshape(*values.shape[:2], -1))
    _, members, points = values.shape
    if members < 5 or points == 0:
        return 0.0
    complete = values[:, :, np.isfinite(values).all(axis=(0, 1))].astype(float)
    complete = complete - complete.mean(axis=1, keepdims=True)
    complete = complete[(complete != 0).any(axis=(1, 2))]  # leads that all members share
    if complete.shape[0] == 0:
        return 0.0
    varying = (complete**2).sum(axis=1).min(axis=0) > 0
    if not varying.any():
        return 0.0
    chosen = complete[:, :, varying]
    second, raw = (chosen**2).mean(axis=1), (chosen**4).mean(axis=1)
    variance = second * members / (members - 1)
    fourth = (members + 1) * raw - 3 * (members - 1) * second**2
    fourth *= members**2 / ((members - 1) * (members - 2) * (members - 3))
    # E[k2^2] = sigma^4 (1 + 2/(M-1)) + k4/M
    square = (variance**2 - fourth / members) / (1 + 2 / (members - 1))
    mean = float(np.mean(fourth.sum(axis=1) / np.maximum(square.sum(axis=1), 1e-300)))
    error = np.sqrt(24 / members / max(1.0, varying.sum() / 4))
    return mean if mean > 2 * error else 0.0


def _complete_members(values: np.ndarray) -> np.ndarray:
    """Leads (L, M, K) at which any member has a value, and the members that have one at all."""
    here = np.isfinite(values).any(axis=2)
    leads = here.any(axis=1)
    return values[leads][:, here[leads].all(axis=0)]
