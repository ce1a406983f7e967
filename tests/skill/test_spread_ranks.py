"""Ranks among fewer members, spread over those of more."""

import numpy as np
import pytest

from ensemble_horizon.skill.ranks import ranks, sides, spread_over


@pytest.mark.parametrize(("few", "many"), [(1, 2), (4, 19), (19, 20), (7, 7), (50, 20)])
def test_uniform_ranks_stay_uniform_and_none_is_lost(few, many):
    uniform = spread_over(np.full(few + 1, 1 / (few + 1)), many)
    assert uniform == pytest.approx(np.full(many + 1, 1 / (many + 1)))
    counts = np.random.default_rng(1).random((3, 2, few + 1))
    assert spread_over(counts, many).sum(axis=-1) == pytest.approx(counts.sum(axis=-1))


def test_it_is_what_random_draws_give_on_average():
    """The same as members that lack a value, whose ranks are spread at random."""
    members, draws = 9, 200_000
    departure = np.full((members, draws), np.nan)
    departure[:4] = np.array([-2.0, -1.0, 1.0, 2.0])[:, None]  # rank 2 of the 5 among 4 members
    drawn = ranks(sides(departure), members, np.random.default_rng(2))
    share = np.bincount(drawn, minlength=members + 1) / draws
    # Shares scatter by less than sqrt(p (1 - p) / n) = 0.0012.
    assert spread_over(np.eye(5)[2], members) == pytest.approx(share, abs=0.006)
