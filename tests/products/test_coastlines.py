"""Coastlines: the data, the window, and nothing that is no coast.

The boxes below are known geography (common knowledge), independent of the data file.
"""

from __future__ import annotations

from importlib import resources

import numpy as np
import pytest

from ensemble_horizon.errors import ArgumentError
from ensemble_horizon.products.coast import coastlines


def points(lines, west, east, south, north):
    every = np.concatenate(lines)
    inside = (every[:, 0] > west) & (every[:, 0] < east)
    return every[inside & (every[:, 1] > south) & (every[:, 1] < north)]


def test_iceland_lies_where_it_does():
    coast = points(coastlines(-30, -10, 60, 69), -26, -12, 62, 68)
    assert coast[:, 0].min() == pytest.approx(-24.5, abs=0.3)
    assert coast[:, 0].max() == pytest.approx(-13.5, abs=0.3)
    assert coast[:, 1].min() == pytest.approx(63.4, abs=0.2)
    assert coast[:, 1].max() == pytest.approx(66.5, abs=0.2)


def test_open_ocean_is_empty():
    lines = coastlines(-40, -35, 30, 35)
    assert not lines or len(points(lines, -40, -35, 30, 35)) == 0


def test_no_line_follows_the_date_line_or_the_pole():
    lines = coastlines(-180, 180, -90, 90)
    assert len(lines) > 1000
    for line in lines:
        along = np.abs(np.abs(line[:, 0]) - 180) < 0.005
        assert not np.any(along[1:] & along[:-1])
        assert line[:, 1].min() > -86
        assert np.abs(np.diff(line[:, 0])).max(initial=0) < 10


def test_windows_may_lie_on_any_turn_of_the_globe():
    # Chukotka and Alaska on the two sides of the date line.
    lines = coastlines(170, 200, 60, 70)
    coast = points(lines, 170, 200, 60, 70)
    assert (coast[:, 0] < 180).sum() > 50 and (coast[:, 0] > 180).sum() > 50
    here = points(coastlines(-30, -10, 60, 69), -26, -12, 62, 68)
    there = points(coastlines(330, 350, 60, 69), 334, 348, 62, 68)
    np.testing.assert_allclose(there[:, 0] - 360, here[:, 0])


def test_specks_can_be_left_out():
    every, large = coastlines(-180, 180, -90, 90), coastlines(-180, 180, -90, 90, smallest=2.0)
    assert len(large) < len(every) / 3
    assert all(np.ptp(line, axis=0).max() >= 2.0 for line in large)


def test_an_empty_window_is_refused():
    with pytest.raises(ArgumentError, match="add 360 to an eastern edge"):
        coastlines(170, -170, -10, 10)


def test_the_data_file_is_small_and_has_its_papers():
    folder = resources.files("ensemble_horizon.products") / "data"
    assert len((folder / "coastline.npz").read_bytes()) < 400_000
    papers = (folder / "PROVENANCE.txt").read_text(encoding="utf-8")
    for words in (
        "Natural Earth",
        "Public domain",
        "world-atlas",
        "convert_coastline.py",
        "SHA-256",
    ):
        assert words in papers
    assert "://" not in papers
