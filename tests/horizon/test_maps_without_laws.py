"""Maps of which only horizon and status are wanted: the same numbers, no law fitted for them."""

import numpy as np
import pytest

from ensemble_horizon.horizon import map_limits
from ensemble_horizon.horizon.criteria import (
    Chance,
    ClimatologyFraction,
    SaturationFraction,
    Tolerance,
)
from ensemble_horizon.horizon.map_limits import MapOptions, PointBatch, limits_of_points
from ensemble_horizon.spread.sampling import LeadNoise

LEAD = 6.0 * np.arange(21)
POINTS = 300
WANTED = ("horizon", "status")
PLAIN = (Tolerance(1.5), ClimatologyFraction(0.7), Chance(1.0, 0.4))


def batch():
    """Curves that grow, that do not, that begin beyond every threshold, and that have gaps."""
    rng = np.random.default_rng(5)
    rate = rng.uniform(-0.01, 0.06, POINTS)
    spread = 0.3 * np.exp(rate * LEAD[:, np.newaxis]) * np.exp(0.1 * rng.normal(size=(21, POINTS)))
    spread[:, :20] += 5
    spread[::3, 20:40] = np.nan
    spread[:, 40:45] = np.nan
    shares = {1.0: 1 - np.exp(-spread)}
    noise = LeadNoise(np.full(LEAD.size, 19.0), np.eye(LEAD.size))
    return PointBatch(
        LEAD, (spread**2).astype(np.float32), noise, shares, rng.uniform(1, 4, POINTS),
        np.zeros(POINTS, int), (noise,),
    )  # fmt: skip


@pytest.fixture
def fits(monkeypatch):
    """Curves that a law was fitted to, call by call."""
    counted = []
    real = map_limits.select_where_enough

    def counting(lead, spreads, *others):
        counted.append(spreads.shape[0])
        return real(lead, spreads, *others)

    monkeypatch.setattr(map_limits, "select_where_enough", counting)
    return counted


@pytest.mark.parametrize(
    ("criteria", "fitted"), [(PLAIN, 0), ((*PLAIN, SaturationFraction(0.5)), POINTS)]
)
def test_limits_are_the_same_and_laws_fitted_where_they_count(fits, criteria, fitted):
    options = (criteria, 6.0, "auto", "log", None, 20)
    everything = limits_of_points(batch(), MapOptions(*options))
    fits.clear()
    found = limits_of_points(batch(), MapOptions(*options, WANTED))
    assert sum(fits) == fitted
    assert set(found) == set(WANTED)
    for name in WANTED:
        np.testing.assert_array_equal(found[name], everything[name])
        assert found[name].dtype == everything[name].dtype
    assert set(np.unique(found["status"])) == {0, 1, 2, 3, 4}


@pytest.mark.parametrize(
    ("confidence", "wanted"),
    [(None, ()), (None, ("horizon", "growth_rate")), (0.9, WANTED)],
)
def test_what_rests_on_a_law_has_one(fits, confidence, wanted):
    options = MapOptions((Tolerance(1.5),), 0.0, "auto", "log", confidence, 20, wanted)
    assert options.rests_on_law
    if confidence is None:
        found = limits_of_points(batch(), options)
        assert np.isfinite(found.get("growth_rate", 0)).any()
        assert fits == [POINTS]
