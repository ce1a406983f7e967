"""Nights that faults are done to."""

from __future__ import annotations

from pathlib import Path

import pytest
from small_night import Forking, SmallNight


@pytest.fixture
def small(tmp_path: Path) -> SmallNight:
    """Four starts with analyses."""
    return SmallNight(tmp_path).write().settings()


@pytest.fixture(scope="module")
def forking(tmp_path_factory):
    """Runs of the command that need not load the program."""
    warm = SmallNight(tmp_path_factory.mktemp("warm")).write().settings()
    runs = Forking(warm)
    yield runs
    runs.close()
