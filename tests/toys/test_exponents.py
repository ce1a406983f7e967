"""Lyapunov exponents: closed forms, two methods against each other, refusals."""

from dataclasses import dataclass
from typing import ClassVar

import numpy as np
import pytest

from ensemble_horizon import toys
from ensemble_horizon.errors import ArgumentError
from ensemble_horizon.toys.dynamics import System, parameter

SINK = toys.system("spiral-sink")
LORENZ = toys.system("lorenz-63")


@dataclass(frozen=True)
class Driven(System):
    """dx/dt = (a + b cos(2 pi t)) x, whose exponent is a."""

    a: float = parameter(-0.3, "1", "mean rate")
    b: float = parameter(2.0, "1", "swing of the rate")

    name: ClassVar[str] = "driven"
    step: ClassVar[float] = 0.02

    @property
    def variables(self):
        return ("x",)

    def default_state(self):
        return np.array([1.0])

    def tendency(self, state, time=0.0):
        return self._rate(time) * np.asarray(state, dtype=float)

    def jacobian(self, state, time=0.0):
        return np.broadcast_to(self._rate(time)[..., None], (*np.shape(state), 1)).copy()

    def _rate(self, time):
        return (self.a + self.b * np.cos(2 * np.pi * np.asarray(time)))[..., None]


@pytest.mark.parametrize("method", [toys.lyapunov_exponents, toys.pair_growth])
@pytest.mark.parametrize("dt", [0.1, 0.2])
def test_interval_without_noise_holds_the_error_of_the_time_step(method, dt):
    # The exponents are -0.1 exactly; those of the scheme are not, and nothing here is random.
    found = method(SINK, length=200.0, dt=dt)
    error = np.abs(found.exponents + 0.1)
    half = 0.5 * (found.high - found.low)
    assert np.all(error > 1e-9)
    assert np.all(error <= half)
    assert np.all(half < 4 * error)


def test_of_a_linear_system_the_scheme_itself_is_known():
    # Runge-Kutta of order four multiplies by 1 + z + z^2/2 + z^3/6 + z^4/24 with z = (-a + iw) dt.
    dt = 0.3
    z = (-0.1 + 1j) * dt
    factor = 1 + z + z**2 / 2 + z**3 / 6 + z**4 / 24
    found = toys.lyapunov_exponents(SINK, length=200.0, dt=dt)
    assert found.exponents == pytest.approx(np.log(abs(factor)) / dt, rel=1e-12)


def test_sum_is_the_mean_divergence():
    found = toys.lyapunov_exponents(LORENZ, length=200.0, members=20, spin_up=5.0)
    assert found.sum.low <= -41 / 3 <= found.sum.high
    assert found.sum.high - found.sum.low < 1e-3
    assert found.sum.value == pytest.approx(found.exponents.sum(), abs=1e-12)


@pytest.mark.parametrize("method", [toys.lyapunov_exponents, toys.pair_growth])
def test_time_passes_for_a_driven_system(method):
    found = method(Driven(), length=1000.0, state=np.linspace(0.5, 1.5, 20)[:, None])
    assert found.low[0] <= -0.3 <= found.high[0]
    assert found.high[0] - found.low[0] < 0.01


@pytest.mark.parametrize("every", [10, 40])
@pytest.mark.parametrize("amplitude", [1e-7, 1e-4])
def test_two_runs_agree_with_tangent_vectors(every, amplitude):
    one = toys.lyapunov_exponents(LORENZ, 1, length=2000.0, dt=0.02, seed=1)
    two = toys.pair_growth(LORENZ, length=2000.0, dt=0.02, seed=2, every=every, amplitude=amplitude)
    assert two.low[0] <= one.high[0]
    assert one.low[0] <= two.high[0]
    # Sprott, Chaos and Time-Series Analysis (from memory).
    assert two.exponents[0] == pytest.approx(0.9056, abs=0.02)
    assert two.high[0] - two.low[0] < 0.05


def test_default_amplitude_is_far_from_rounding_and_from_saturation():
    found = [
        toys.pair_growth(LORENZ, length=500.0, members=50, spin_up=5.0, seed=3, amplitude=amplitude)
        for amplitude in (None, 1e-6, 1e-3)
    ]
    # The same controls with other distances differ by less than a tenth of the noise.
    rates = [record.exponents[0] for record in found]
    assert np.ptp(rates) < 0.1 * (found[0].high[0] - found[0].low[0])


def test_how_often_vectors_are_orthonormalised_does_not_matter():
    few, often = (
        toys.lyapunov_exponents(LORENZ, length=160.0, members=10, spin_up=10.0, every=every)
        for every in (2, 5)
    )
    assert few.length == pytest.approx(often.length, rel=0.05)
    assert few.exponents == pytest.approx(often.exponents, abs=0.02)


def test_errors_that_grow_by_a_power_of_time_have_the_exponent_zero_in_their_interval():
    # Kepler: neighbouring orbits part linearly in time, so that ln(t) / t goes to zero from above.
    orbit = toys.system("two-body")
    for found in (
        toys.lyapunov_exponents(orbit, 1, length=1500.0),
        toys.pair_growth(orbit, length=1500.0),
    ):
        assert found.exponents[0] > 0.01
        assert found.low[0] <= 0 <= found.high[0]
        with pytest.raises(ArgumentError, match="leading exponent above zero"):
            _ = found.doubling_time


def test_a_closed_orbit_has_dimension_one_and_no_doubling():
    found = toys.lyapunov_exponents(toys.system("van-der-pol"), length=1500.0, members=20)
    assert found.low[0] <= 0 <= found.high[0]
    assert found.dimension.value == pytest.approx(1.0, abs=1e-9)
    with pytest.raises(ArgumentError, match="doubling time of van-der-pol"):
        _ = found.doubling_time


def test_a_fixed_point_has_dimension_nought_and_a_flow_without_shrinking_all():
    assert toys.lyapunov_exponents(SINK, length=100.0).dimension.value == 0.0
    still = toys.lyapunov_exponents(toys.system("spiral-sink", decay=0.0), length=100.0)
    assert still.dimension.value == 2.0


def test_doubling_time_follows_and_needs_a_clock_for_hours():
    found = toys.lyapunov_exponents(LORENZ, 1, length=1000.0, dt=0.02)
    doubling = found.doubling_time
    assert doubling.value == pytest.approx(np.log(2) / found.exponents[0])
    assert doubling.low == pytest.approx(np.log(2) / found.high[0])
    assert doubling.high == pytest.approx(np.log(2) / found.low[0])
    with pytest.raises(ArgumentError, match="physical clock"):
        _ = found.doubling_hours
    # Released along the swinging border of the gyres, where neighbours part.
    floats = toys.system("double-gyre-floats", rows=1, columns=1)
    released = np.stack([np.linspace(4.5e4, 5.5e4, 20), np.linspace(1e3, 5e3, 20)], axis=-1)
    drifting = toys.lyapunov_exponents(floats, 1, length=2000.0, state=released)
    assert drifting.doubling_hours.value == pytest.approx(24 * drifting.doubling_time.value)
    assert drifting.doubling_hours.units == "hours"


def test_members_that_share_their_start_are_worth_one():
    # A float in the quiet middle of the basin: no volume shrinks, so its exponent is not negative.
    floats = toys.system("double-gyre-floats", rows=1, columns=1)
    middle = np.array([5.0e4, 2.5e4])
    found = toys.lyapunov_exponents(floats, 1, length=2000.0, state=middle)
    assert found.high[0] >= 0
    apart = toys.lyapunov_exponents(floats, 1, length=2000.0, state=np.tile(middle, (48, 1)))
    assert apart.high[0] - apart.low[0] < 0.3 * (found.high[0] - found.low[0])


def test_dimension_needs_enough_exponents():
    found = toys.lyapunov_exponents(LORENZ, 2, length=100.0, members=10, spin_up=5.0)
    with pytest.raises(ArgumentError, match=r"2 of 3, with the sum .*ask for a count above 2"):
        _ = found.dimension


def test_seed_decides_and_members_given_one_by_one_are_taken():
    def run(seed, **options):
        return toys.lyapunov_exponents(
            LORENZ, 1, length=100.0, spin_up=2.0, seed=seed, **options
        ).exponents

    assert np.array_equal(run(3), run(3))
    assert not np.array_equal(run(3), run(4))
    states = np.arange(36.0).reshape(12, 3)
    found = toys.lyapunov_exponents(LORENZ, 1, length=100.0, spin_up=2.0, state=states)
    assert found.members == 12
    assert found.length >= 100.0


def test_few_members_take_blocks_of_time():
    found = toys.lyapunov_exponents(LORENZ, 1, length=150.0, members=2, dt=0.02)
    assert found.members == 2
    assert found.low[0] <= 0.9056 <= found.high[0]


def test_progress_is_told():
    told = []
    toys.lyapunov_exponents(
        SINK, length=50.0, progress=lambda done, total: told.append(done / total)
    )
    assert told[-1] == 1.0
    assert np.all(np.diff(told) > 0)


@pytest.mark.parametrize(
    ("options", "message"),
    [
        ({"count": 4}, "at most the 3 variables of lorenz-63; found 4"),
        ({"count": 0}, "count: expected a whole number of at least 1; found 0"),
        ({"length": -1.0}, "length: expected a finite number above zero"),
        ({"members": 0}, "members: expected a whole number"),
        ({"members": 1.5}, "members: expected a whole number"),
        ({"dt": 0.0}, "dt: expected a finite number above zero"),
        ({"every": 0}, "every: expected a whole number"),
        ({"spin_up": -2.0}, "spin_up: expected a finite number of at least zero"),
        ({"confidence": 90}, "confidence: expected a number between 0 and 1"),
        ({"seed": -1}, "seed: expected a whole number"),
        ({"state": [1.0, 2.0]}, "the 3 variables of lorenz-63; found shape"),
        ({"state": np.ones((4, 3)), "members": 5}, "one per member"),
        ({"every": 300}, "every: expected so few steps of lorenz-63"),
    ],
)
def test_bad_input_is_refused(options, message):
    with pytest.raises(ArgumentError, match=message):
        toys.lyapunov_exponents(LORENZ, **{"length": 50.0, **options})


@pytest.mark.parametrize("method", [toys.lyapunov_exponents, toys.pair_growth])
def test_a_run_that_blows_up_says_when_and_where(method):
    # Unstable at this step, and slow enough to be overtaken only after the spin-up of nothing.
    with pytest.raises(ArgumentError, match=r"not finite at time \d.* \(step \d+\)"):
        method(LORENZ, length=500.0, dt=0.2, spin_up=0.0)


def test_twins_that_cannot_be_told_apart_are_refused():
    with pytest.raises(ArgumentError, match="amplitude 1e-300 has sunk below rounding"):
        toys.pair_growth(LORENZ, length=50.0, amplitude=1e-300)


def test_a_sum_too_uncertain_to_be_zero_gives_no_dimension():
    found = toys.lyapunov_exponents(toys.system("van-der-pol", mu=2.0), length=100.0)
    assert found.sum.low < -1.0 < 0.0 < found.sum.high
    with pytest.raises(ArgumentError, match="surely negative, or zero; found an interval"):
        _ = found.dimension
    assert found.positive <= found.not_negative
