"""Exponents, their sum, number above zero and dimension, against what the literature says."""

import functools

import numpy as np
import pytest

from ensemble_horizon import toys

QUANTITIES = (
    "exponents",
    "leading_exponent",
    "sum_of_exponents",
    "positive_exponents",
    "dimension",
)
# Model time in all; and for systems too large for all their exponents, shorter ways about.
LENGTH = {
    "van-der-pol": 2e4,
    "rossler": 1e5,
    "lorenz-63": 2e4,
    "lorenz-96": 2e3,
    "two-body": 2e4,
    "figure-eight": 2e3,
    "compact-planets": 5e3,
    "double-gyre-floats": 2e3,
}
OPTIONS = {"lorenz-96-two-scales": {"length": 2.0, "spin_up": 0.05}}
QUICK = ("spiral-sink", "lorenz-63")


@functools.cache
def measured(name, parameters):
    options = OPTIONS.get(name, {"length": LENGTH.get(name, 1e3)})
    system = toys.system(name, **dict(parameters))
    return toys.lyapunov_exponents(system, seed=5, confidence=0.99, **options)


def cases():
    for name, kind in toys.SYSTEMS.items():
        for value in kind.published:
            if value.quantity in QUANTITIES:
                marks = [] if name in QUICK and not value.parameters else [pytest.mark.slow]
                yield pytest.param(name, value, id=f"{name}-{value.quantity}", marks=marks)


def within(value, low, high, published):
    """Inside the 99 percent interval, or one percent off."""
    inside = (low <= published) & (published <= high)
    return bool(np.all(inside | (np.abs(value - published) <= 0.01 * np.abs(published))))


@pytest.mark.parametrize(("name", "value"), list(cases()))
def test_as_published(name, value):
    found = measured(name, value.parameters)
    published = np.array(value.value)
    if value.quantity == "positive_exponents":
        assert found.positive == value.value
    elif value.quantity == "exponents":
        assert within(found.exponents, found.low, found.high, published)
    elif value.quantity == "leading_exponent":
        assert within(found.exponents[0], found.low[0], found.high[0], published)
    else:
        of_all = found.sum if value.quantity == "sum_of_exponents" else found.dimension
        assert within(of_all.value, of_all.low, of_all.high, published)


def test_intervals_are_narrow_enough_to_tell():
    # What is compared above would be worth nothing beside intervals that hold everything.
    found = measured("lorenz-63", ())
    assert np.all(found.high - found.low < 0.03)
    assert found.sum.high - found.sum.low < 1e-3
    assert found.dimension.high - found.dimension.low < 2e-3


@pytest.mark.slow
def test_wolfs_parameters():
    # Wolf et al. 1985, Physica D 16, table 1 (from memory): 1.50, 0.00, -22.46 for these.
    parameters = (("sigma", 16.0), ("rho", 45.92), ("beta", 4.0))
    found = measured("lorenz-63", parameters)
    assert within(found.exponents, found.low, found.high, np.array([1.50, 0.0, -22.46]))


@pytest.mark.slow
def test_errors_of_lorenz_96_double_in_two_days():
    # Lorenz and Emanuel 1998, J. Atmos. Sci. 55 (from memory): 2.1 days at five days a unit.
    found = toys.lyapunov_exponents(toys.system("lorenz-96"), 1, length=1e5)
    doubling = found.doubling_time
    assert round(5 * doubling.value, 1) == 2.1
    assert 5 * (doubling.high - doubling.low) < 0.02


@pytest.mark.slow
def test_default_settings_give_three_digits_of_lorenz_63():
    # 0.9056 to four digits: Sprott, Chaos and Time-Series Analysis (from memory).
    found = toys.lyapunov_exponents(toys.system("lorenz-63"), count=1)
    assert found.high[0] - found.low[0] <= 2 * 0.0005
    assert found.exponents[0] == pytest.approx(0.9056, abs=0.001)
