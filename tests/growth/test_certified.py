"""Certified regression values.

NIST Statistical Reference Datasets, nonlinear regression, data set Rat42 (Ratkowsky 1983):
b1/(1 + exp(b2 - b3 x)) is the logistic law with Es = b1, lambda = b3, E0 = b1/(1 + exp(b2)).
"""

from __future__ import annotations

import numpy as np
import pytest
import xarray as xr

from ensemble_horizon.growth import fit_curves, fit_growth

X = np.array([9.0, 14.0, 21.0, 28.0, 42.0, 57.0, 63.0, 70.0, 79.0])
Y = np.array([8.93, 10.80, 18.59, 22.33, 39.35, 56.11, 61.73, 64.62, 67.08])
B = np.array([7.2462237576e01, 2.6180768402e00, 6.7359200066e-02])
SD = np.array([1.7340283401e00, 8.8295217536e-02, 3.4465663377e-03])
RSS = 8.0565229338e00


def agreeing_digits(value: float, certified: float) -> float:
    """The log relative error of the NIST data sets."""
    return float(-np.log10(max(abs(value - certified) / abs(certified), 1e-15)))


def test_rat42_to_the_certified_digits() -> None:
    fit = fit_curves(X, Y[None], "logistic", tolerance=1e-20)
    initial, rate, saturation = fit.parameters[0]
    assert agreeing_digits(saturation, B[0]) >= 9.5
    assert agreeing_digits(np.log(saturation / initial - 1.0), B[1]) >= 9.5
    assert agreeing_digits(rate, B[2]) >= 9.5
    assert agreeing_digits(fit.rss[0], RSS) >= 10
    errors = fit.standard_errors[0]
    assert agreeing_digits(errors[2], SD[0]) >= 7
    assert agreeing_digits(errors[1], SD[2]) >= 7
    # b2 = ln(Es/E0 - 1): its certified deviation follows from our covariance by the chain rule.
    chain = np.array([-saturation / initial**2, 0.0, 1.0 / initial]) / (saturation / initial - 1.0)
    assert agreeing_digits(np.sqrt(chain @ fit.covariance[0] @ chain), SD[1]) >= 7


def test_rat42_at_the_usual_tolerance() -> None:
    curve = xr.DataArray(Y, coords={"lead": X}, dims="lead")
    fit = fit_growth(curve, law="logistic")
    assert float(fit.saturation) == pytest.approx(B[0], rel=1e-9)
    assert float(fit.growth_rate) == pytest.approx(B[2], rel=1e-9)
    assert float(fit.initial_error) == pytest.approx(B[0] / (1.0 + np.exp(B[1])), rel=1e-9)
    assert float(fit.rss) == pytest.approx(RSS, rel=1e-10)
    assert float(fit.saturation_se) == pytest.approx(SD[0], rel=1e-7)
    assert float(fit.growth_rate_se) == pytest.approx(SD[2], rel=1e-7)


@pytest.mark.parametrize("start", [0, 1, 2, 3])
def test_rat42_does_not_depend_on_company(start: int) -> None:
    rng = np.random.default_rng(start)
    crowd = np.abs(Y * np.exp(0.3 * rng.standard_normal((3000, Y.size))))
    crowd[1234 + start] = Y
    fit = fit_curves(X, crowd, "logistic")
    alone = fit_curves(X, Y[None], "logistic")
    np.testing.assert_allclose(fit.parameters[1234 + start], alone.parameters[0], rtol=1e-12)
