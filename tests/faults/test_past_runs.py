"""A file of a past start that is replaced while it is verified, which is done once for good."""

from __future__ import annotations

import numpy as np
from small_night import SmallNight

from ensemble_horizon.night.verification import newly
from ensemble_horizon.night.verification.rolling import rolling_scores
from ensemble_horizon.settings import read_settings


def test_a_past_start_that_changes_while_it_is_read_is_not_filed(tmp_path, monkeypatch):
    night = SmallNight(tmp_path).write().settings()
    settings, shelf = read_settings(night.config), night.archive / "scores"
    real, replaced = newly.verify_input, night.member(2, day=11)

    def verify(*arguments, **options):
        found = real(*arguments, **options)
        if np.datetime64("2031-02-11") in arguments[1].catalogue.start_ticks.astype("M8[us]"):
            night.write_member(2, day=11, shift=0.4)
        return found

    with monkeypatch.context() as patch:
        patch.setattr(newly, "verify_input", verify)
        found = rolling_scores(settings, "2031-02-14T00", shelf)
    assert [path.name for path in shelf.iterdir()] == ["20310212T00.nc"]
    (told,) = [text for text in found.left_out if "2031-02-11" in text]
    assert f"{replaced}: expected a file that stays as it is" in told
    again = rolling_scores(settings, "2031-02-14T00", shelf)
    assert again.left_out == ()
    assert {path.name for path in shelf.iterdir()} == {"20310211T00.nc", "20310212T00.nc"}


def test_analyses_that_change_while_they_are_read_file_nothing(tmp_path, monkeypatch):
    night = SmallNight(tmp_path).write().settings()
    settings, shelf = read_settings(night.config), night.archive / "scores"
    real = newly.verify_input

    def verify(*arguments, **options):
        found = real(*arguments, **options)
        night.write_analyses()
        return found

    with monkeypatch.context() as patch:
        patch.setattr(newly, "verify_input", verify)
        found = rolling_scores(settings, "2031-02-14T00", shelf)
    assert not shelf.exists() or list(shelf.iterdir()) == []
    assert any("analyses.nc: expected a file that stays" in text for text in found.left_out)
    assert len(rolling_scores(settings, "2031-02-14T00", shelf).verified) == 2
