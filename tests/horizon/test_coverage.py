"""Intervals cover the truth as often as they say, on ensembles with known truth.

Twenty Gaussian members of one point, or of a region of thirty cells, whose true spread follows a
logistic law; members keep their order from lead to lead for shorter or longer. The 90 percent
intervals must cover the truth in 87 to 93 percent of the cases.
"""

import numpy as np
import pytest
import xarray as xr

import ensemble_horizon as eh
from ensemble_horizon.horizon.criteria import SaturationFraction, Tolerance
from ensemble_horizon.horizon.curve_growth import growth_of_curves
from ensemble_horizon.horizon.curve_limits import Curve, limits_of_curve
from ensemble_horizon.spread.kurtosis import pooled_kurtosis
from ensemble_horizon.spread.sampling import noise_from_gram

MEMBERS, LEADS, RATE, SATURATION, INITIAL = 20, 41, 0.03, 10.0, 0.1
LEAD = 6.0 * np.arange(LEADS)
TRUE_SPREAD = SATURATION / (1 + (SATURATION / INITIAL - 1) * np.exp(-RATE * LEAD))
LOW, HIGH = 0.87, 0.93


def true_horizon(size):
    return np.log((SATURATION / INITIAL - 1) / (SATURATION / size - 1)) / RATE


def members(rng, cases, cells, memory):
    """Members (case, L, M, C) with lead-to-lead correlation ``memory``."""
    leads = np.subtract.outer(np.arange(LEADS), np.arange(LEADS))
    root = np.linalg.cholesky(memory ** np.abs(leads) + 1e-9 * np.eye(LEADS))
    distance = np.abs(np.subtract.outer(np.arange(cells), np.arange(cells)))
    pattern = np.linalg.cholesky(np.exp(-distance / 5.0))
    noise = rng.standard_normal((cases, LEADS, MEMBERS, cells))
    noise = np.einsum("kl,nlmc->nkmc", root, noise) @ pattern.T
    return noise * TRUE_SPREAD[:, np.newaxis, np.newaxis]


def curve_of(values):
    deviation = values - values.mean(axis=1, keepdims=True)
    spread = np.sqrt((deviation**2).sum(axis=1).mean(axis=1) / (MEMBERS - 1))
    gram = deviation @ deviation.transpose(0, 2, 1) / values.shape[2]
    return Curve(spread, noise_from_gram(gram, pooled_kurtosis(values)))


def covered(low, high, truth):
    return float(np.mean((np.asarray(low) <= truth) & (np.asarray(high) >= truth)))


@pytest.mark.slow
@pytest.mark.parametrize(
    ("cells", "memory", "hold"),
    [(1, 0.9, 0.0), (1, 0.98, 0.0), (30, 0.9, 0.0), (30, 0.98, 0.0), (1, 0.95, 12.0)],
)
def test_ninety_percent_intervals_of_curves_cover_as_often_as_they_say(cells, memory, hold):
    rng = np.random.default_rng([cells, int(100 * memory)])
    cases = 1000
    curves = [curve_of(v) for _ in range(cases // 50) for v in members(rng, 50, cells, memory)]
    spreads = np.stack([curve.spread for curve in curves])
    noises = [curve.noise for curve in curves]
    growths = growth_of_curves(LEAD, spreads, noises, "logistic", "log", 0.9)
    criteria = [Tolerance(3.0), SaturationFraction(0.5)]
    ends = np.array(
        [
            [(limit.low, limit.high) for limit in limits_of_curve(LEAD, c, g, criteria, hold, 0.9)]
            for c, g in zip(curves, growths, strict=True)
        ]
    )
    shares = {
        "horizon by tolerance": covered(ends[:, 0, 0], ends[:, 0, 1], true_horizon(3.0)),
        "horizon by saturation": covered(ends[:, 1, 0], ends[:, 1, 1], true_horizon(5.0)),
    }
    for name, truth in (
        ("growth_rate", RATE),
        ("doubling_time", np.log(2) / RATE),
        ("initial_error", INITIAL),
        ("saturation", SATURATION),
    ):
        low = [growth.values[f"{name}_low"] for growth in growths]
        high = [growth.values[f"{name}_high"] for growth in growths]
        shares[name] = covered(low, high, truth)
    print(f"\ncells {cells}, memory {memory}, hold {hold}: {shares}")
    assert all(LOW <= share <= HIGH for share in shares.values()), shares


@pytest.mark.slow
def test_ninety_percent_intervals_of_the_public_function_cover_as_often_as_they_say():
    rng = np.random.default_rng(7)
    found = []
    for values in members(rng, 1000, 1, 0.95)[..., 0]:
        coord = xr.DataArray(LEAD, dims="lead", attrs={"units": "hours"})
        runs = xr.DataArray(values, dims=("lead", "member"), coords={"lead": coord})
        limit = eh.horizon(eh.spread(runs), tolerance=3.0, sampling=eh.sampling(runs))
        found.append((float(limit.low), float(limit.high)))
    share = covered(*np.array(found).T, true_horizon(3.0))
    print(f"\npublic function: {share}")
    assert LOW <= share <= HIGH


def test_intervals_hold_the_horizon_and_shrink_with_members():
    rng = np.random.default_rng(3)
    widths = []
    for number in (10, 40, 160):
        order = rng.standard_normal((number, 1)) * np.ones(LEADS)
        values = (order + 0.3 * rng.standard_normal((number, LEADS))).T * TRUE_SPREAD[:, np.newaxis]
        coord = xr.DataArray(LEAD, dims="lead", attrs={"units": "hours"})
        runs = xr.DataArray(values, dims=("lead", "member"), coords={"lead": coord})
        limit = eh.horizon(eh.spread(runs), tolerance=3.0, sampling=eh.sampling(runs))
        assert limit.low <= limit.horizon <= limit.high
        widths.append(float(limit.high - limit.low))
    # Sampling error falls with the root of the number of members (common practice).
    assert widths[0] / widths[2] == pytest.approx(4.0, rel=0.4)
