"""What a smaller initial error buys, against closed forms."""

import numpy as np
import pytest
import xarray as xr

import ensemble_horizon as eh
from ensemble_horizon.growth import LAWS

LEAD = np.arange(0.0, 241.0, 6.0)


def fit_of(law, parameters):
    values = LAWS[law].value(np.array([parameters]), LEAD)[0]
    coord = xr.DataArray(LEAD, dims="lead", attrs={"units": "hours"})
    curve = xr.DataArray(values, dims="lead", coords={"lead": coord}, attrs={"units": "K"})
    return eh.fit_growth(curve, law=law)


@pytest.mark.parametrize("tolerance", [1.0, 2.0, 5.0])
def test_an_exponential_law_sells_lead_by_the_logarithm(tolerance):
    # Gain ln k / lambda, whatever the tolerance (common practice).
    bought = eh.reach(fit_of("exponential", [0.1, 0.03]), tolerance=tolerance, error_factor=[2, 10])
    np.testing.assert_allclose(bought.gained[0], np.log([2, 10]) / 0.03, rtol=1e-6)
    assert np.isinf(bought.perfect[0])


def test_a_power_law_has_a_limit_even_for_a_perfect_start():
    # T0(A) = A^p / (c p) (Brisch and Kantz 2019, New J. Phys.).
    bought = eh.reach(fit_of("power", [0.1, 0.02, 0.8]), tolerance=2.0, error_factor=[1e9])
    limit = 2.0**0.8 / (0.02 * 0.8)
    assert float(bought.perfect[0]) == pytest.approx(limit, rel=1e-5)
    assert float(bought.horizon[0, 0]) == pytest.approx(limit, rel=1e-5)


def test_a_source_of_error_limits_a_perfect_start():
    # dV/dt = (aV + S)(1 - V/Vs) from V = 0 (Dalcher and Kalnay 1987, Tellus), by quadrature.
    from scipy.integrate import quad

    a, source, ceiling = 0.06, 0.01, 100.0
    bought = eh.reach(
        fit_of("logistic-source", [0.2, a / 2, source, np.sqrt(ceiling)]), tolerance=3.0
    )
    truth = quad(lambda v: 1 / ((a * v + source) * (1 - v / ceiling)), 0, 9.0)[0]
    assert float(bought.perfect[0]) == pytest.approx(truth, rel=1e-3)


def test_beyond_saturation_there_is_no_limit():
    bought = eh.reach(fit_of("logistic", [0.1, 0.05, 8.0]), tolerance=9.0)
    assert np.isinf(bought.horizon).all()
    assert np.isnan(bought.gained).all()


def test_what_is_no_fit_is_refused():
    with pytest.raises(eh.ArgumentError, match="dataset from fit_growth"):
        eh.reach(xr.Dataset({"growth_rate": 1.0}), tolerance=1.0)
