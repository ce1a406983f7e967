"""Intervals on maps cover the truth as often as they say, on fields with known truth."""

import numpy as np
import pytest

from ensemble_horizon.horizon.criteria import SaturationFraction, Tolerance
from ensemble_horizon.horizon.map_limits import MapOptions
from ensemble_horizon.night.engine import Engine
from ensemble_horizon.night.mapping import Fields, map_fields, noise_of_start
from ensemble_horizon.night.variables import Variable
from ensemble_horizon.spread.kurtosis import pooled_kurtosis
from ensemble_horizon.spread.reduction import Reduction, reduce_block
from ensemble_horizon.spread.sample import sample_layout

MEMBERS, LEADS, RATE, SATURATION, INITIAL = 20, 41, 0.03, 10.0, 0.1
LEAD = 6.0 * np.arange(LEADS)
TRUE_SPREAD = SATURATION / (1 + (SATURATION / INITIAL - 1) * np.exp(-RATE * LEAD))
SHAPE = (48, 64)
CRITERIA = {"tolerance": Tolerance(3.0), "half": SaturationFraction(0.5)}


def true_horizon(size):
    return np.log((SATURATION / INITIAL - 1) / (SATURATION / size - 1)) / RATE


def runs(memory, draw, scale):
    """Members (M, L, P): every point with noise of its own, memory from lead to lead."""
    size = SHAPE[0] * SHAPE[1]
    noise = np.empty((LEADS, MEMBERS, size), dtype=np.float32)
    noise[0] = draw((MEMBERS, size))
    for lead in range(1, LEADS):
        fresh = draw((MEMBERS, size))
        noise[lead] = memory * noise[lead - 1] + np.sqrt(1 - memory**2) * fresh
    noise *= (TRUE_SPREAD / scale)[:, np.newaxis, np.newaxis]
    return noise.transpose(1, 0, 2)


def maps_of(values):
    layout = sample_layout(SHAPE, MEMBERS, LEADS)
    reduction = Reduction(SHAPE[0] * SHAPE[1], sample=layout.index)
    summary = reduce_block(values, reduction, None)
    noise = noise_of_start(summary, layout, pooled_kurtosis(summary.sample_values))
    variable = Variable(
        "v", "v", "1", ("v",), factor=1.0, plausible=None, hold=0.0, criteria=CRITERIA,
        climatology=None,
    )  # fmt: skip
    options = MapOptions(tuple(CRITERIA.values()), 0.0, "logistic", "log", 0.9, MEMBERS)
    with Engine(1) as engine:
        fields = Fields(summary.variance, None, noise)
        return map_fields(engine, LEAD, fields, variable, layout, options)


@pytest.mark.slow
@pytest.mark.parametrize("memory", [0.5, 0.9, 0.98])
def test_ninety_percent_intervals_at_grid_points_cover_as_often_as_they_say(memory):
    rng = np.random.default_rng(int(100 * memory))
    found = maps_of(runs(memory, rng.standard_normal, 1.0))
    shares = {}
    for number, truth in enumerate((true_horizon(3.0), true_horizon(5.0))):
        inside = (found["low"][number] <= truth) & (found["high"][number] >= truth)
        shares[list(CRITERIA)[number]] = float(inside.mean())
    low, high = found["growth_rate_low"], found["growth_rate_high"]
    shares["growth rate"] = float(((low <= RATE) & (high >= RATE)).mean())
    print(f"\nmap, memory {memory}: {shares}")
    assert all(0.87 <= share <= 0.93 for share in shares.values()), shares


@pytest.mark.slow
def test_heavy_tails_are_allowed_for():
    # Laplace members with full memory: excess kurtosis 3, so the spread scatters far more.
    rng = np.random.default_rng(5)
    size = SHAPE[0] * SHAPE[1]
    order = rng.laplace(size=(MEMBERS, 1, size)) / np.sqrt(2)
    values = (order * TRUE_SPREAD[np.newaxis, :, np.newaxis]).astype(np.float32)
    found = maps_of(values)
    truth = true_horizon(3.0)
    share = float(((found["low"][0] <= truth) & (found["high"][0] >= truth)).mean())
    print(f"\nmap, Laplace members: {share}")
    assert 0.85 <= share <= 0.95
