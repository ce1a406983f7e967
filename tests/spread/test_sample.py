"""The thin sample of a grid that stands for its sampling noise."""

import numpy as np
import pytest

from ensemble_horizon.spread.sample import MOST_POINTS, sample_layout

SHAPES = [
    (361, 720), (145, 192), (20, 1440), (1440, 20), (10, 3000), (1, 100000), (2, 50000),
    (100, 3600), (3, 3), (1, 1), (70000,), (7,), (),
]  # fmt: skip


@pytest.mark.parametrize("shape", SHAPES)
@pytest.mark.parametrize(("members", "leads"), [(20, 41), (100, 6000)])
def test_every_block_of_any_grid_is_sampled(shape, members, leads):
    layout = sample_layout(shape, members, leads)
    assert set(layout.block_of_sample) == set(range(layout.blocks))
    assert layout.index.size <= MOST_POINTS
    assert (np.diff(layout.index) > 0).all()
    np.testing.assert_array_equal(layout.block_of_point[layout.index], layout.block_of_sample)
