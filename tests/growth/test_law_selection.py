"""Choice between laws."""

from __future__ import annotations

from collections.abc import Callable

import numpy as np
import pytest
from statsmodels.tools.eval_measures import aicc

from ensemble_horizon.growth import LAWS, Reason, corrected_akaike, fit_curves, select_law

Draw = Callable[..., np.ndarray]
Noisy = Callable[..., np.ndarray]


def test_criterion_against_direct_computation(
    law_name: str, lead: np.ndarray, noisy: Noisy
) -> None:
    fit = fit_curves(lead, noisy(law_name, 5), law_name)
    residual = noisy(law_name, 5) - LAWS[law_name].value(fit.parameters, lead)
    rss, n, k = (residual**2).sum(axis=1), lead.size, len(LAWS[law_name].parameters) + 1
    expected = n * np.log(rss / n) + 2 * k + 2 * k * (k + 1) / (n - k - 1)
    np.testing.assert_allclose(fit.aicc, expected, rtol=1e-9)


def test_criterion_against_statsmodels() -> None:
    """statsmodels' aicc takes the log-likelihood, here the Gaussian one at its maximum."""
    rss, n, p = 3.0, 20, 3
    likelihood = -0.5 * n * (np.log(2.0 * np.pi * rss / n) + 1.0)
    constant = n * (np.log(2.0 * np.pi) + 1.0)
    ours = corrected_akaike(np.array([rss]), np.array([n]), p)[0]
    assert ours == pytest.approx(aicc(likelihood, n, p + 1) - constant)


def test_criterion_without_room_is_infinite() -> None:
    assert np.isinf(corrected_akaike(np.array([1.0]), np.array([5]), 3)).all()
    assert np.isnan(corrected_akaike(np.array([np.nan]), np.array([50]), 3)).all()


@pytest.mark.parametrize("scale", ["linear", "log"])
def test_exact_curves_choose_their_own_law(
    law_name: str, scale: str, lead: np.ndarray, draw: Draw
) -> None:
    curves = LAWS[law_name].value(draw(law_name, 50), lead)
    selection = select_law(lead, curves, scale=scale)
    names = np.array(selection.laws)[selection.chosen]
    assert (names == law_name).all()
    assert (selection.reason == Reason.fitted).all()


def test_noisy_curves_choose_the_least_criterion(lead: np.ndarray, noisy: Noisy) -> None:
    curves = np.concatenate([noisy(name, 40, 0.02) for name in LAWS])
    selection = select_law(lead, curves)
    table = np.stack([fit.aicc for fit in selection.fits])
    np.testing.assert_array_equal(selection.chosen, np.nanargmin(table, axis=0))
    own = np.repeat(np.arange(4), 40)
    assert (selection.chosen == own).reshape(4, 40).mean(axis=1).min() > 0.6


def test_curves_that_do_not_grow_fall_to_the_exponential(lead: np.ndarray) -> None:
    falling = np.exp(-0.01 * lead)[None]
    selection = select_law(lead, falling)
    assert selection.laws[selection.chosen[0]] == "exponential"
    assert selection.reason[0] == Reason.no_growth


def test_nothing_to_choose_from(lead: np.ndarray) -> None:
    rows = np.array([np.full_like(lead, np.nan), np.ones_like(lead)])
    selection = select_law(lead, rows)
    assert list(selection.chosen) == [-1, -1]
    assert list(selection.reason) == [Reason.too_few_points, Reason.constant]


def test_hardly_more_points_than_parameters() -> None:
    lead = np.arange(5.0)
    selection = select_law(lead, 0.1 * np.exp(0.5 * lead)[None], ["logistic", "power"])
    assert np.isinf(selection.fits[0].aicc).all()
    assert selection.chosen[0] == 0
