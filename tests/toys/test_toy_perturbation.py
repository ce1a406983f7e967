"""One contract for every method of perturbation, and what holds for the front they share."""

from fractions import Fraction

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from perturbation_cases import CHANNEL, RING, TIME, options, past_and_now
from scipy import stats

from ensemble_horizon import toys
from ensemble_horizon.errors import ArgumentError

STATE = RING.default_state()
SYSTEMS = ("lorenz-96", "two-layer-channel", "double-gyre-floats")
# Neither small against the state, which would cost digits of the sum, nor large.
SIZE = {"lorenz-96": 0.3, "two-layer-channel": 1.0e5, "double-gyre-floats": 300.0}


@pytest.fixture(params=sorted(toys.PERTURBATIONS))
def method(request):
    return request.param


@pytest.fixture(params=SYSTEMS)
def name(request):
    return request.param


def made(method, name, members=4, **change):
    arguments = {"amplitude": SIZE[name], "seed": 2, "time": TIME, "method": method}
    arguments |= options(method, name) | change
    return toys.perturb(toys.system(name), past_and_now(name)[1], members, **arguments)


def test_describes_itself(method):
    kind = toys.PERTURBATIONS[method]
    assert kind.name == method
    assert kind.title
    assert kind.source
    assert issubclass(kind, toys.Perturbation)


def test_every_member_lies_at_the_amplitude(method, name):
    system = toys.system(name)
    for norm, measure in system.norms().items():
        amplitude = SIZE[name] * float(measure.length(np.ones(system.size)))
        moved = made(method, name, amplitude=amplitude, norm=norm) - past_and_now(name)[1]
        assert moved.shape == (4, system.size)
        assert measure.length(moved) == pytest.approx(np.full(4, amplitude), rel=1e-12)
        gaps = measure.length(moved[:, None] - moved)[np.triu_indices(4, 1)]
        assert gaps.min() > 1e-3 * amplitude


def test_same_seed_gives_the_same_bits(method, name):
    assert np.array_equal(made(method, name), made(method, name))


@pytest.mark.parametrize("method", ["gaussian", "correlated", "bred-vectors"])
def test_another_seed_gives_other_members(method, name):
    assert not np.any(np.all(made(method, name) == made(method, name, seed=3), axis=-1))


def test_a_member_does_not_depend_on_how_many_there_are(method, name):
    few, many = made(method, name, members=2), made(method, name, members=5)[:2]
    if toys.PERTURBATIONS[method].nested:
        assert np.array_equal(few, many)
    else:
        assert few == pytest.approx(many, abs=1e-7 * SIZE[name])


@pytest.mark.parametrize("method", ["singular-vectors", "backward-lyapunov-vectors"])
def test_random_sums_of_leading_vectors(method, name):
    chosen = {"members": 30, "count": 3, "norm": "area-weighted"}
    moved = made(method, name, **chosen) - past_and_now(name)[1]
    # Thirty members in three dimensions, and no fewer of them again.
    scatter = np.linalg.svd(moved, compute_uv=False)
    assert scatter[2] > 0.2 * scatter[0]
    assert scatter[3] < 1e-8 * scatter[0]
    few = made(method, name, **chosen | {"members": 4})
    assert np.array_equal(few, made(method, name, **chosen)[:4])


def test_pairs_have_the_control_as_their_mean_exactly(method, name):
    control = past_and_now(name)[1]
    members = made(method, name, members=6, paired=True, amplitude=1e-3 * SIZE[name])
    plus, minus = members[::2], members[1::2]
    # Where a displacement is larger than this no pair of numbers has the control as its mean.
    possible = np.all(np.abs(plus - control) <= 3 * np.abs(control), axis=0)
    assert possible.mean() > 0.8
    assert np.array_equal(((plus + minus) / 2)[:, possible], np.tile(control[possible], (3, 1)))
    for column, value in zip(members.T[possible], control[possible], strict=True):
        assert sum(map(Fraction, column)) / 6 == Fraction(value)
    alone = made(method, name, members=3, amplitude=1e-3 * SIZE[name])
    assert plus == pytest.approx(alone, abs=1e-9 * SIZE[name])


def test_displacements_are_what_perturb_adds(method, name):
    system, control = toys.system(name), past_and_now(name)[1]
    chosen = {"amplitude": SIZE[name], "seed": 2, "time": TIME, "method": method}
    moved = toys.displacements(system, control, 4, **chosen, **options(method, name))
    assert np.array_equal(control + moved, made(method, name))
    if method not in ("bred-vectors", "lagged"):
        # Nothing is lost to the size of the state.
        chosen["amplitude"] = 1e-30
        small = toys.displacements(system, control, 4, **chosen, **options(method, name))
        length = system.norms()["euclidean"].length(small)
        assert length == pytest.approx(np.full(4, 1e-30), rel=1e-14)


def test_a_pair_is_the_single_displacement_both_ways(name):
    control = past_and_now(name)[1]
    pair = made("gaussian", name, members=2, paired=True)
    single = made("gaussian", name, members=1)[0] - control
    measure = toys.system(name).norms()["euclidean"]
    assert measure.length(pair - control) == pytest.approx([SIZE[name]] * 2, rel=1e-12)
    assert pair[0] - control == pytest.approx(single, rel=1e-9, abs=1e-10 * SIZE[name])
    assert pair[1] - control == pytest.approx(-single, rel=1e-9, abs=1e-10 * SIZE[name])


usual = st.floats(-1e6, 1e6).filter(lambda value: abs(value) > 1e-6)


@given(usual, st.floats(-3.0, 3.0))
def test_pair_mean_is_exact_up_to_three_times_the_control(control, ratio):
    plus, minus = toys.plus_and_minus(np.array([control]), np.array([[ratio * control]]))
    assert Fraction(plus[0]) + Fraction(minus[0]) == 2 * Fraction(control)
    assert (plus[0] + minus[0]) / 2 == control
    assert plus[0] == pytest.approx(control + ratio * control, rel=1e-15, abs=1e-15 * abs(control))


@given(usual, st.floats(-1e9, 1e9))
def test_pair_mean_is_met_to_rounding_beyond_that(control, displacement):
    plus, minus = toys.plus_and_minus(np.array([control]), np.array([[displacement]]))
    finest = np.spacing(max(abs(plus[0]), abs(minus[0])))
    assert abs((Fraction(plus[0]) + Fraction(minus[0])) / 2 - Fraction(control)) <= finest / 4


def test_pair_around_zero_is_exact():
    plus, minus = toys.plus_and_minus(np.zeros(2), np.array([[0.1, -0.3]]))
    assert plus.tolist() == [0.1, -0.3]
    assert minus.tolist() == [-0.1, 0.3]


def test_gaussian_directions_are_uniform_on_the_sphere():
    # A component of a uniform direction in N dimensions: (u + 1) / 2 ~ Beta((N-1)/2, (N-1)/2).
    moved = toys.perturb(RING, STATE, 4000, amplitude=1.0, seed=3) - STATE
    law = stats.beta(39 / 2, 39 / 2)
    assert stats.kstest((moved[:, 17] + 1) / 2, law.cdf).pvalue > 0.01


def test_gaussian_directions_are_uniform_in_the_chosen_norm():
    # The same law, for the energy of the flow along a pattern of energy 1.
    state = CHANNEL.default_state()
    norm = CHANNEL.norms()["total-energy"]
    chosen = {"amplitude": 1.0, "seed": 3, "norm": "total-energy"}
    moved = norm.flatten(toys.perturb(CHANNEL, state, 4000, **chosen) - state)
    law = stats.beta(11 / 2, 11 / 2)
    for direction in (np.eye(12)[0], np.eye(12)[9], np.full(12, 12**-0.5)):
        assert stats.kstest((moved @ direction + 1) / 2, law.cdf).pvalue > 0.01


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


def test_a_method_made_beforehand_is_the_same_as_its_name(method, name):
    record = toys.perturbation(method, **options(method, name))
    state = past_and_now(name)[1]
    system, amplitude = toys.system(name), SIZE[name]
    again = toys.perturb(system, state, 4, amplitude=amplitude, seed=2, time=TIME, method=record)
    assert np.array_equal(again, made(method, name))


@pytest.mark.parametrize(
    ("change", "message"),
    [
        ({"amplitude": -1.0}, "amplitude: expected a finite number of at least zero"),
        ({"amplitude": None}, "displacements of gaussian have no size of their own; found None"),
        ({"members": 0}, "members: expected a whole number of at least 1"),
        ({"members": 3, "paired": True}, "expected an even number.*Next: take 4, or paired=False"),
        ({"seed": -1}, "seed: expected a whole number of at least 0; found -1"),
        ({"time": np.inf}, "time: expected a finite number"),
        ({"method": "gausian"}, "did you mean 'gaussian'"),
        ({"norm": "euclidian"}, "norm: .*did you mean 'euclidean'"),
        ({"sclae": 1.0}, "option of gaussian: expected one of scale; found 'sclae'.*'scale'"),
        ({"method": "singular-vectors", "scale": np.ones(40)}, "option of singular-vectors: .*'sc"),
        ({"method": toys.perturbation("gaussian"), "length": 1.0}, "option length: expected no op"),
        ({"scale": np.zeros(40)}, "scale: expected 40 numbers of at least zero"),
        ({"scale": np.ones(3)}, "found shape .3,."),
        ({"state": np.tile(STATE, (2, 1))}, "state: expected one state of 40 variables"),
    ],
)
def test_wrong_arguments_are_refused(change, message):
    arguments = {"state": STATE, "members": 3, "amplitude": 1.0, "seed": 1} | change
    with pytest.raises(ArgumentError, match=message):
        toys.perturb(RING, **arguments)
