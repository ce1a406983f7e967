"""Parameters that exercise each law, and noisy curves made from them."""

from __future__ import annotations

from collections.abc import Callable

import numpy as np
import pytest

from ensemble_horizon.growth import LAWS

LEAD = np.arange(41) * 6.0


def drawn_parameters(law: str, number: int, seed: int = 0) -> np.ndarray:
    """Parameters (number, P) of growing curves that use most of the run."""
    rng = np.random.default_rng(seed)
    ranges = {
        "exponential": [(0.1, 0.5), (0.005, 0.02)],
        "logistic": [(0.02, 0.3), (0.015, 0.06), (0.8, 3.0)],
        "logistic-source": [(0.02, 0.3), (0.005, 0.03), (0.0005, 0.01), (0.8, 3.0)],
        "power": [(0.02, 0.3), (0.005, 0.03), (0.25, 0.95)],
    }[law]
    return np.stack([rng.uniform(low, high, number) for low, high in ranges], axis=1)


@pytest.fixture(params=list(LAWS))
def law_name(request: pytest.FixtureRequest) -> str:
    return str(request.param)


@pytest.fixture
def lead() -> np.ndarray:
    return LEAD.copy()


@pytest.fixture(scope="session")
def draw() -> Callable[..., np.ndarray]:
    return drawn_parameters


@pytest.fixture
def noisy() -> Callable[..., np.ndarray]:
    def make(law: str, number: int, noise: float = 0.05, seed: int = 1) -> np.ndarray:
        clean = LAWS[law].value(drawn_parameters(law, number, seed), LEAD)
        rng = np.random.default_rng(seed + 1000)
        return np.asarray(clean * np.exp(noise * rng.standard_normal(clean.shape)))

    return make
