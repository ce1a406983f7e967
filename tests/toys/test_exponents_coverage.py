"""Intervals of exponents hold the truth as often as they claim."""

import numpy as np
import pytest
from scipy import stats

from ensemble_horizon import toys
from ensemble_horizon.errors import ArgumentError
from ensemble_horizon.toys.exponents.samples import measure

# Sprott, Chaos and Time-Series Analysis (from memory); error below 1e-4.
TRUTH = 0.9056


def rates_with_memory(rng, members, blocks, memory):
    """First-order autoregressive series of mean 0, (members, blocks, 1)."""
    series = rng.standard_normal((members, blocks, 1))
    series[:, 0] /= np.sqrt(1 - memory**2)
    for block in range(1, blocks):
        series[:, block] += memory * series[:, block - 1]
    return series


@pytest.mark.parametrize(
    ("members", "memory"), [(1, 0.0), (1, 0.2), (4, 0.0), (4, 0.5), (20, 0.0), (20, 0.9)]
)
def test_of_series_whose_mean_is_known(members, memory):
    rng = np.random.default_rng(6)
    edges = np.linspace(10.0, 50.0, 33)
    held, made = 0, 1000
    refused = 0
    for _ in range(made):
        try:
            found = measure(rates_with_memory(rng, members, 32, memory), edges, 0.9, np.zeros(1))
        except ArgumentError:
            refused += 1
            continue
        held += bool(abs(found.mean[0]) <= found.half_width[0])
    assert refused < 0.15 * made
    # Binomial standard error at 0.9 of 1000: 0.009.
    assert 0.86 <= held / (made - refused) <= 0.95


def test_memory_as_long_as_the_blocks_is_refused():
    rng = np.random.default_rng(7)
    edges = np.linspace(10.0, 50.0, 33)
    with pytest.raises(ArgumentError, match=r"length: expected blocks of time .* 12 needed"):
        measure(rates_with_memory(rng, 1, 32, 0.95), edges, 0.9, np.zeros(1))


@pytest.mark.slow
def test_of_lorenz_63():
    made = 160
    held = 0
    for seed in range(made):
        found = toys.lyapunov_exponents(
            toys.system("lorenz-63"),
            1,
            length=500.0,
            members=20,
            spin_up=10.0,
            dt=0.02,
            seed=1000 + seed,
        )
        held += bool(found.low[0] <= TRUTH <= found.high[0])
    # 84 to 96 percent, which is what 90 percent gives in 160 trials at the 98 percent level.
    assert stats.binom.ppf(0.01, made, 0.9) <= held <= stats.binom.ppf(0.99, made, 0.9)
    assert 0.84 <= held / made <= 0.96
