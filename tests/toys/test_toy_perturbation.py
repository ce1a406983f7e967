"""Displacements of a given norm in no preferred direction."""

import numpy as np
import pytest
from scipy import stats

from ensemble_horizon import toys
from ensemble_horizon.errors import ArgumentError

RING = toys.system("lorenz-96")
STATE = RING.default_state()


@pytest.mark.parametrize("method", sorted(toys.PERTURBATIONS))
def test_every_method_keeps_the_norm(method):
    moved = toys.perturb(RING, STATE, 7, amplitude=0.25, seed=2, method=method) - STATE
    assert moved.shape == (7, 40)
    assert np.linalg.norm(moved, axis=-1) == pytest.approx(np.full(7, 0.25), rel=1e-12)
    assert not np.allclose(moved[0], moved[1])


def test_gaussian_directions_are_uniform_on_the_sphere():
    # A component of a uniform direction in N dimensions: (u + 1) / 2 ~ Beta((N-1)/2, (N-1)/2).
    moved = toys.perturb(RING, STATE, 4000, amplitude=1.0, seed=3) - STATE
    law = stats.beta(39 / 2, 39 / 2)
    assert stats.kstest((moved[:, 17] + 1) / 2, law.cdf).pvalue > 0.01


def test_scale_shapes_the_displacement():
    scale = np.zeros(40)
    scale[[3, 4]] = [1.0, 3.0]
    moved = toys.perturb(RING, STATE, 3000, amplitude=2.0, seed=4, scale=scale) - STATE
    assert np.all(moved[:, scale == 0] == 0)
    ratio = np.median(np.abs(moved[:, 4] / moved[:, 3]))
    # The ratio of two normals is Cauchy: its absolute median is the ratio of their scales.
    assert ratio == pytest.approx(3.0, rel=0.1)


def test_zero_norm_gives_the_control():
    assert np.array_equal(toys.perturb(RING, STATE, 2, amplitude=0.0, seed=1), [STATE, STATE])


@pytest.mark.parametrize(
    ("change", "message"),
    [
        ({"amplitude": -1.0}, "amplitude: expected a finite number of at least zero"),
        ({"members": 0}, "members: expected a whole number of at least 1"),
        ({"method": "gausian"}, "did you mean 'gaussian'"),
        ({"scale": np.zeros(40)}, "scale: expected 40 numbers of at least zero"),
        ({"scale": np.ones(3)}, "found shape .3,."),
        ({"state": np.tile(STATE, (2, 1))}, "state: expected one state of 40 variables"),
    ],
)
def test_wrong_arguments_are_refused(change, message):
    arguments = {"state": STATE, "members": 3, "amplitude": 1.0, "seed": 1} | change
    with pytest.raises(ArgumentError, match=message):
        toys.perturb(RING, **arguments)
