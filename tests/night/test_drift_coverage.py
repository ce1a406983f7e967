"""Intervals of positions cover the truth as often as they say, on drift with known truth.

Twenty members at Gaussian displacements east and north, as wide either way or stretched along one
direction, whose true root-mean-square distance follows a logistic law; members keep their order
from lead to lead for shorter or longer. Positions go in as latitudes and longitudes by the date
line, through the reduction, curves and maps of a night. The 90 percent intervals must cover the
truth in 87 to 93 percent of the cases, as those of scalars must.
"""

import numpy as np
import pytest

from ensemble_horizon.horizon.criteria import SaturationFraction, Tolerance
from ensemble_horizon.horizon.curve_growth import growth_of_curves
from ensemble_horizon.horizon.curve_limits import limits_of_curve
from ensemble_horizon.horizon.map_limits import MapOptions
from ensemble_horizon.night.curves import curves_of_start
from ensemble_horizon.night.engine import Engine
from ensemble_horizon.night.mapping import Fields, map_fields, noise_of_start
from ensemble_horizon.night.variables import Places, Variable
from ensemble_horizon.spread.displacements import SPHERE
from ensemble_horizon.spread.kurtosis import pooled_kurtosis
from ensemble_horizon.spread.reduction import Reduction, RegionWeights, reduce_block
from ensemble_horizon.spread.sample import sample_layout

MEMBERS, LEADS, RATE, SATURATION, INITIAL = 20, 41, 0.03, 10_000.0, 100.0
LEAD = 6.0 * np.arange(LEADS)
TRUE_SPREAD = SATURATION / (1 + (SATURATION / INITIAL - 1) * np.exp(-RATE * LEAD))
RADIUS = 6_371_000.0
LOW, HIGH = 0.87, 0.93
CRITERIA = {"tolerance": Tolerance(3000.0), "half": SaturationFraction(0.5)}
VARIABLE = Variable(
    "drift", "drift", "m", ("lat", "lon"), factor=1.0, plausible=None, hold=0.0,
    criteria=CRITERIA, climatology=None, geometry=SPHERE,
)  # fmt: skip


def true_horizon(size):
    return np.log((SATURATION / INITIAL - 1) / (SATURATION / size - 1)) / RATE


def positions(rng, points, memory, stretch, pattern=None):
    """Latitudes and longitudes (M, L, P) about a point of the equator at the date line."""
    noise = np.empty((2, LEADS, MEMBERS, points))
    noise[:, 0] = rng.standard_normal((2, MEMBERS, points))
    for lead in range(1, LEADS):
        fresh = rng.standard_normal((2, MEMBERS, points))
        noise[:, lead] = memory * noise[:, lead - 1] + np.sqrt(1 - memory**2) * fresh
    if pattern is not None:
        noise = noise @ pattern.T
    size = np.array([1.0, stretch]) / np.hypot(1.0, stretch)
    noise *= size[:, None, None, None] * TRUE_SPREAD[:, None, None]
    turned = noise[0] * 0.6 + noise[1] * 0.8, noise[1] * 0.6 - noise[0] * 0.8
    longitude, latitude = (np.degrees(part.transpose(1, 0, 2) / RADIUS) for part in turned)
    return latitude, (longitude + 360) % 360 - 180


def curve_of(latitude, longitude):
    """The curve of one site, or of the region of all points, as a night makes it."""
    points = latitude.shape[2]
    region = RegionWeights("all", np.arange(points), np.full(points, 1 / points))
    one = points == 1
    places = Places(() if one else (region,), ("site",) if one else (), np.zeros(int(one), int))
    reduction = Reduction(
        points, places.regions, places.site_index, np.arange(points), fields=False, geometry=SPHERE
    )
    summary = reduce_block(latitude, reduction, None, longitude)
    kurtosis = pooled_kurtosis(summary.sample_values)
    return curves_of_start(summary, VARIABLE, places, kurtosis)[0]


def covered(low, high, truth):
    return float(np.mean((np.asarray(low) <= truth) & (np.asarray(high) >= truth)))


@pytest.mark.slow
@pytest.mark.parametrize(
    ("points", "memory", "stretch"),
    [(1, 0.9, 1.0), (1, 0.98, 1.0), (1, 0.9, 0.3), (1, 0.98, 0.3), (30, 0.9, 0.5)],
)
def test_ninety_percent_intervals_of_drift_cover_as_often_as_they_say(points, memory, stretch):
    rng = np.random.default_rng([points, int(100 * memory), int(10 * stretch)])
    distance = np.abs(np.subtract.outer(np.arange(points), np.arange(points)))
    pattern = np.linalg.cholesky(np.exp(-distance / 5.0))
    curves = [curve_of(*positions(rng, points, memory, stretch, pattern)) for _ in range(1000)]
    spreads = np.stack([curve.spread for curve in curves])
    noises = [curve.noise for curve in curves]
    growths = growth_of_curves(LEAD, spreads, noises, "logistic", "log", 0.9)
    criteria = list(CRITERIA.values())
    ends = np.array(
        [
            [(limit.low, limit.high) for limit in limits_of_curve(LEAD, c, g, criteria, 0.0, 0.9)]
            for c, g in zip(curves, growths, strict=True)
        ]
    )
    shares = {
        "tolerance": covered(ends[:, 0, 0], ends[:, 0, 1], true_horizon(3000.0)),
        "saturation": covered(ends[:, 1, 0], ends[:, 1, 1], true_horizon(5000.0)),
    }
    low = [growth.values["growth_rate_low"] for growth in growths]
    high = [growth.values["growth_rate_high"] for growth in growths]
    shares["growth rate"] = covered(low, high, RATE)
    print(f"\ndrift, points {points}, memory {memory}, stretch {stretch}: {shares}")
    assert all(LOW <= share <= HIGH for share in shares.values()), shares


@pytest.mark.slow
@pytest.mark.parametrize(("memory", "stretch"), [(0.9, 1.0), (0.98, 1.0), (0.9, 0.3), (0.98, 0.3)])
def test_ninety_percent_intervals_at_release_points_cover_as_often_as_they_say(memory, stretch):
    rng = np.random.default_rng([int(100 * memory), int(10 * stretch)])
    shape = (32, 48)
    layout = sample_layout(shape, MEMBERS, LEADS)
    size = shape[0] * shape[1]
    latitude, longitude = positions(rng, size, memory, stretch)
    reduction = Reduction(size, sample=layout.index, geometry=SPHERE)
    summary = reduce_block(latitude, reduction, None, longitude)
    noise = noise_of_start(summary, layout, pooled_kurtosis(summary.sample_values))
    options = MapOptions(tuple(CRITERIA.values()), 0.0, "logistic", "log", 0.9, MEMBERS)
    with Engine(1) as engine:
        fields = Fields(summary.variance, None, noise)
        found = map_fields(engine, LEAD, fields, VARIABLE, layout, options)
    shares = {
        name: covered(found["low"][number], found["high"][number], true_horizon(truth))
        for number, (name, truth) in enumerate((("tolerance", 3000.0), ("saturation", 5000.0)))
    }
    shares["growth rate"] = covered(found["growth_rate_low"], found["growth_rate_high"], RATE)
    print(f"\nmap of drift, memory {memory}, stretch {stretch}: {shares}")
    assert all(LOW <= share <= HIGH for share in shares.values()), shares
