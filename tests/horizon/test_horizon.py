"""Horizons of curves whose limits are known in closed form."""

import numpy as np
import pytest
import xarray as xr
from hypothesis import given, settings
from hypothesis import strategies as st

import ensemble_horizon as eh
from ensemble_horizon import Status
from ensemble_horizon.growth import LAWS
from ensemble_horizon.horizon.crossing import first_crossing

LEAD = np.arange(0.0, 241.0, 6.0)


def curve(values, lead=LEAD, units="m s-1"):
    coord = xr.DataArray(lead, dims="lead", attrs={"units": "hours"})
    return xr.DataArray(values, dims="lead", coords={"lead": coord}, attrs={"units": units})


def name(limit):
    return Status(int(limit.status)).name


CLOSED_FORMS = [
    ("exponential", [0.1, 0.03], 3.0, lambda e0, lam, a: np.log(a / e0) / lam),
    (
        "logistic",
        [0.1, 0.03, 10.0],
        3.0,
        lambda e0, lam, es, a: np.log((es / e0 - 1) / (es / a - 1)) / lam,
    ),
    ("power", [0.1, 0.02, 0.8], 2.0, lambda e0, c, p, a: (a**p - e0**p) / (c * p)),
]


@pytest.mark.parametrize(("law", "parameters", "size", "truth"), CLOSED_FORMS)
def test_a_law_crosses_where_its_closed_form_says(law, parameters, size, truth):
    # Lorenz 1969, 1982 (Tellus); Brisch and Kantz 2019 (New J. Phys.): closed forms.
    lead = np.linspace(0, 240, 4001)
    values = LAWS[law].value(np.array([parameters]), lead)[0]
    limit = eh.horizon(curve(values, lead), tolerance=size)
    assert name(limit) == "reached"
    assert float(limit.horizon) == pytest.approx(truth(*parameters, size), abs=0.01)
    assert limit.horizon.attrs["units"] == "hours"


def test_the_ratio_of_two_horizons_does_not_depend_on_the_rate():
    # Common practice: ln(A/d1)/ln(A/d2); 500 m from 5 mm instead of 5 m reaches 2.5 times as far.
    lead = np.linspace(0, 100, 100001)
    for rate in (0.3, 0.9):
        near, far = (
            float(eh.horizon(curve(d * np.exp(rate * lead), lead), tolerance=500.0).horizon)
            for d in (5.0, 0.005)
        )
        assert far / near == pytest.approx(2.5, rel=1e-3)


def test_not_reached_is_beyond_the_run_and_never_a_number():
    limit = eh.horizon(curve(0.1 * np.exp(0.005 * LEAD)), tolerance=3.0)
    assert name(limit) == "beyond_run"
    assert np.isnan(limit.horizon)


def test_exceeded_from_the_first_lead():
    limit = eh.horizon(curve(np.exp(0.02 * LEAD)), tolerance=0.5)
    assert name(limit) == "at_start"
    assert np.isnan(limit.horizon)


@pytest.mark.parametrize(
    "values",
    [2 * np.exp(-0.01 * LEAD), np.full(LEAD.size, 2.0), np.zeros(LEAD.size)],
    ids=["decaying", "constant", "zero"],
)
def test_errors_that_do_not_grow_have_no_horizon(values):
    assert name(eh.horizon(curve(values), tolerance=3.0)) == "no_growth"


def test_zero_spread_at_the_first_lead_grows():
    values = 0.02 * LEAD
    limit = eh.horizon(curve(values), tolerance=2.0)
    assert float(limit.horizon) == pytest.approx(100.0)
    assert name(eh.horizon(curve(values), tolerance=50.0)) == "beyond_run"


def test_too_little_data():
    values = np.full(LEAD.size, np.nan)
    assert name(eh.horizon(curve(values), tolerance=1.0)) == "no_data"
    values[3] = 0.5
    assert name(eh.horizon(curve(values), tolerance=1.0)) == "no_data"
    values[3] = 5.0
    assert name(eh.horizon(curve(values), tolerance=1.0)) == "at_start"


def test_leads_without_a_value_are_passed_over():
    values = 0.1 * LEAD
    values[[4, 5]] = np.nan
    assert float(eh.horizon(curve(values), tolerance=2.7).horizon) == pytest.approx(27.0)


def daily_cycle():
    return 0.05 * LEAD * (1 + 0.5 * np.sin(2 * np.pi * LEAD / 24))


def test_hold_passes_over_crossings_that_do_not_last():
    values = daily_cycle()
    short = float(eh.horizon(curve(values), tolerance=3.0).horizon)
    held = float(eh.horizon(curve(values), tolerance=3.0, hold=24).horizon)
    assert short < held
    after = (held <= LEAD) & (held + 24 >= LEAD)
    assert (values[after] >= 3.0).all()
    first_after_short = (short <= LEAD) & (short + 24 >= LEAD)
    assert (values[first_after_short] < 3.0).any()


def test_a_crossing_too_late_to_have_lasted_is_not_counted():
    values = np.where(LEAD < 234, 0.1 + 0.001 * LEAD, 5.0)
    assert name(eh.horizon(curve(values), tolerance=3.0, hold=24)) == "beyond_run"
    assert name(eh.horizon(curve(values), tolerance=3.0)) == "reached"


def brute_force(lead, values, level, hold):
    """The definition, spelled out: the first crossing that nothing takes back within the hold."""
    for k in range(len(lead)):
        if values[k] < level or (k > 0 and values[k - 1] >= level):
            continue
        bracket = slice(max(k - 1, 0), k + 1)
        time = np.interp(level, values[bracket], lead[bracket])
        for later in range(k, len(lead)):
            if values[later] < level:
                break
            if lead[later] >= time + hold - 1e-9:
                return np.nan if k == 0 else time
    return np.nan


@given(
    st.lists(st.integers(0, 6), min_size=6, max_size=20),
    st.sampled_from([0.0, 3.0, 6.0, 12.0]),
)
@settings(max_examples=200, deadline=None)
def test_crossing_equals_the_definition_spelled_out(values, hold):
    values = np.array(values, dtype=float)
    lead = 3.0 * np.arange(values.size)
    found = first_crossing(lead, values[:, np.newaxis], 3.5, hold).time[0]
    np.testing.assert_allclose(found, brute_force(lead, values, 3.5, hold))


def test_fraction_of_saturation_is_fitted_or_given():
    values = LAWS["logistic"].value(np.array([[0.1, 0.05, 8.0]]), LEAD)[0]
    truth = np.log((8 / 0.1 - 1) / (8 / 4.0 - 1)) / 0.05
    fitted = eh.horizon(curve(values), saturation_fraction=0.5)
    assert float(fitted.threshold) == pytest.approx(4.0, rel=1e-6)
    assert float(fitted.horizon) == pytest.approx(truth, abs=0.3)
    given_level = eh.horizon(curve(values), saturation_fraction=0.5, saturation=4.0)
    assert float(given_level.threshold) == pytest.approx(2.0)


def test_a_law_without_saturation_has_no_fraction_of_it():
    limit = eh.horizon(curve(0.1 * np.exp(0.01 * LEAD)), saturation_fraction=0.5)
    assert name(limit) == "no_data"


def test_fraction_of_climatology():
    limit = eh.horizon(curve(0.1 * LEAD), climatology_fraction=0.7, climatology=10.0)
    assert float(limit.threshold) == pytest.approx(7.0)
    assert float(limit.horizon) == pytest.approx(70.0)
    with pytest.raises(eh.ArgumentError, match="climatological standard deviation"):
        eh.horizon(curve(0.1 * LEAD), climatology_fraction=0.7)


def test_chance_runs_on_shares():
    shares = np.clip((LEAD - 60) / 120, 0, 1)
    limit = eh.horizon(curve(shares, units="1"), chance=0.2)
    assert float(limit.horizon) == pytest.approx(84.0)
    assert name(eh.horizon(curve(np.zeros(LEAD.size)), chance=0.2)) == "beyond_run"


@pytest.mark.parametrize("criteria", [{}, {"tolerance": 1.0, "chance": 0.1}])
def test_exactly_one_criterion(criteria):
    with pytest.raises(eh.ArgumentError, match="exactly one"):
        eh.horizon(curve(LEAD), **criteria)


@pytest.mark.parametrize("bad", [0.0, -1.0, np.nan, np.inf])
def test_impossible_tolerances_are_refused(bad):
    with pytest.raises(eh.ArgumentError, match="above zero"):
        eh.horizon(curve(LEAD), tolerance=bad)


def test_leads_out_of_order_are_refused():
    with pytest.raises(eh.ArgumentError, match="strictly increasing"):
        eh.horizon(curve(LEAD, LEAD[::-1].copy()), tolerance=1.0)


def test_many_curves_at_once_equal_one_by_one():
    rng = np.random.default_rng(0)
    values = np.cumsum(rng.gamma(1, 0.1, size=(4, 3, LEAD.size)), axis=-1)
    grid = xr.DataArray(
        values,
        dims=("y", "x", "lead"),
        coords={"lead": LEAD, "latitude": (("y", "x"), rng.normal(size=(4, 3)))},
    )
    together = eh.horizon(grid, tolerance=2.0)
    assert "latitude" in together.coords
    for y in range(4):
        for x in range(3):
            alone = eh.horizon(grid.isel(y=y, x=x), tolerance=2.0)
            np.testing.assert_equal(float(together.horizon[y, x]), float(alone.horizon))


@given(st.floats(0.1, 50.0))
@settings(max_examples=30, deadline=None)
def test_units_of_size_do_not_matter(factor):
    values = 0.1 * np.exp(0.03 * LEAD)
    base = float(eh.horizon(curve(values), tolerance=3.0).horizon)
    scaled = float(eh.horizon(curve(values * factor), tolerance=3.0 * factor).horizon)
    assert scaled == pytest.approx(base, rel=1e-9)


def test_status_names_are_spelled_out():
    flags = xr.DataArray(np.array([0, 4], dtype=np.int8), dims="place")
    assert eh.status_names(flags).values.tolist() == ["reached", "no_data"]
