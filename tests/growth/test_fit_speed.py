"""The cost of a fit beside scipy.optimize.curve_fit, in turns on the same machine."""

from __future__ import annotations

import time
from collections.abc import Callable

import numpy as np
import pytest
from scipy.optimize import curve_fit

from ensemble_horizon.growth import fit_curves

Noisy = Callable[..., np.ndarray]


@pytest.mark.slow
def test_logistic_fits_cost_a_small_fraction_of_curve_fit(lead: np.ndarray, noisy: Noisy) -> None:
    """At least forty times less; sixty and more where nothing else runs on the machine."""

    def model(t: np.ndarray, e0: float, rate: float, es: float) -> np.ndarray:
        return es / (1.0 + (es / e0 - 1.0) * np.exp(-rate * t))

    curves = noisy("logistic", 16_384)
    ours, theirs = [], []
    for turn in range(7):
        began = time.perf_counter()
        for curve in curves[turn * 100 : turn * 100 + 100]:
            curve_fit(model, lead, curve, p0=[curve[0], 0.02, curve.max()])
        theirs.append((time.perf_counter() - began) / 100)
        began = time.perf_counter()
        fit_curves(lead, curves, "logistic")
        ours.append((time.perf_counter() - began) / len(curves))
    assert np.median(theirs) / np.median(ours) > 40
