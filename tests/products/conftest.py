"""Fixtures of the product tests."""

from __future__ import annotations

import pytest
from synthetic_products import GRIDS, Result, make_curves, make_maps


@pytest.fixture(params=list(GRIDS))
def grid(request):
    return GRIDS[request.param]()


@pytest.fixture
def result():
    return Result(make_curves(chance=True), make_maps(GRIDS["tiny"]()))


@pytest.fixture
def provenance():
    return {
        "inputs": [f"runs/2031010500/member{m:02d}.nc" for m in range(20)],
        "settings": '[runs]\nfiles = "runs/*.nc"\n',
        "version": "0.1.0",
        "command": "ensemble-horizon estimate config.toml",
    }
