"""Series of starts with known dependence, for the tests of what rests on them."""

import numpy as np
from scipy.signal import lfilter


def autoregressive(rng, starts, series, memory):
    """AR(1) of unit variance, (starts, series)."""
    shocks = rng.standard_normal((starts, series))
    shocks[1:] *= np.sqrt(1 - memory**2)
    return lfilter([1.0], [1.0, -memory], shocks, axis=0)


def hours_gained(rng, starts, series, memory):
    """Differences of two horizons in steps of six hours, cut off at 84 hours: 60 percent zeros."""
    shared, own_a, own_b = (autoregressive(rng, starts, series, memory) for _ in range(3))
    horizons = (100 + 30 * (0.9 * shared + np.sqrt(0.19) * own) for own in (own_a, own_b))
    old, new = (np.minimum(6 * np.round(limit / 6), 84.0) for limit in horizons)
    return new - old
