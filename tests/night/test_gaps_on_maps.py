"""Masks and gaps: what they must not do to noise and shares."""

import numpy as np
import pytest

from ensemble_horizon.horizon.criteria import Chance
from ensemble_horizon.night.curves import curves_of_start
from ensemble_horizon.night.mapping import PooledFields, noise_of_start
from ensemble_horizon.night.variables import Places, Variable
from ensemble_horizon.spread.reduction import Reduction, RegionWeights, reduce_block
from ensemble_horizon.spread.sample import sample_layout

MEMBERS, LEADS, SHAPE = 20, 8, (40, 50)
SIZE = SHAPE[0] * SHAPE[1]


def members(seed=0):
    """Members (M, L, P) that keep their order from lead to lead."""
    order = np.random.default_rng(seed).standard_normal((MEMBERS, 1, SIZE))
    return np.repeat(order, LEADS, axis=1) * (1 + np.arange(LEADS))[:, np.newaxis]


def summary_of(values, **reduction):
    layout = sample_layout(SHAPE, MEMBERS, LEADS)
    return reduce_block(values, Reduction(SIZE, sample=layout.index, **reduction), None), layout


def test_a_mask_leaves_the_noise_of_the_rest_as_it_is():
    values = members()
    values[:, :, : SIZE // 2] = np.nan
    summary, layout = summary_of(values)
    noise = noise_of_start(summary, layout, 0.0)
    np.testing.assert_allclose(noise.whole.dof, MEMBERS - 1)
    assert noise.whole.correlation.min() > 0.99
    assert len(noise.blocks) == layout.blocks


def test_a_lead_that_no_start_has_leaves_the_pooled_noise_to_the_starts():
    layout = sample_layout(SHAPE, MEMBERS, LEADS)
    pooled = PooledFields(layout)
    for start in range(8):
        values = members(start) * (1 + 0.2 * start)
        values[:, 0] = np.nan
        summary, _ = summary_of(values)
        pooled.add(summary, noise_of_start(summary, layout, 0.0))
    noise = pooled.fields(0.9).noise.whole
    assert noise.inflation == pytest.approx(1.1518, abs=1e-3)  # t(7) over normal quantile, 95 %
    assert (noise.dof[1:] != MEMBERS - 1).all()


def test_the_share_of_a_region_is_the_mean_of_its_points_gaps_or_not():
    values = members(3)
    values[:10, :, : SIZE * 56 // 100] = np.nan
    region = RegionWeights("all", np.arange(SIZE), np.full(SIZE, 1 / SIZE))
    summary, _ = summary_of(values, regions=(region,), beyond=(2.0,))
    places = Places((region,), (), np.empty(0, dtype=int))
    chance = Chance(2.0, 0.2)
    variable = Variable("v", "v", "1", ("v",), 1.0, None, 0.0, {chance.label: chance}, None)
    curve = curves_of_start(summary, variable, places, 0.0)[0]
    middle = np.nanmedian(values, axis=0)
    there = np.isfinite(values)
    far = (np.abs(values - middle) > 2.0) & there
    expected = (far.sum(axis=0) / there.sum(axis=0)).mean(axis=1)
    np.testing.assert_allclose(curve.shares[2.0], expected, rtol=1e-10)
