"""An archive whose files are cut off, changed, empty or no files at all, and one of 500 nights."""

from __future__ import annotations

import shutil
from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest
from small_night import SmallNight, faults_of, hidden_in

from ensemble_horizon.products import writing
from ensemble_horizon.products.night_file import read_night_file, write_night_file
from ensemble_horizon.vocabulary import Status

TONIGHT = "20310214T00.nc"


def truncated(path: Path) -> None:
    path.write_bytes(path.read_bytes()[:-200])


def flipped(path: Path) -> None:
    content = bytearray(path.read_bytes())
    content[len(content) // 2] ^= 1
    path.write_bytes(bytes(content))


def empty(path: Path) -> None:
    path.write_bytes(b"")


def folder(path: Path) -> None:
    path.unlink()
    path.mkdir()


FAULTS = [truncated, flipped, empty, folder]


def fill(night: SmallNight, starts: list[np.datetime64], horizons: np.ndarray) -> None:
    """Nights of an archive like the one there is, at other starts and with other horizons."""
    nights = night.archive / "nights"
    tonight = read_night_file(nights / TONIGHT)
    for start, horizon in zip(starts, horizons, strict=True):
        (limit,) = tonight.limits
        limit = replace(
            limit, horizon=horizon, low=horizon - 1, high=horizon + 1, status=Status.reached
        )
        other = replace(tonight, start=start, limits=(limit,))
        write_night_file(nights / other.name, other, {})


@pytest.mark.slow
def test_broken_nights_and_scores(small, forking):
    """One of each kind: set aside or left where it is, named, and the night made without it."""
    forking.done(small, "-q")
    day = np.datetime64("2031-02-01T00")
    starts = [day + np.timedelta64(n, "D") for n in range(-8, 8)]
    fill(small, starts, np.arange(20.0, 36.0))
    broken = []
    for fault, number in zip(FAULTS, range(4), strict=True):
        path = small.archive / "nights" / f"2031020{number + 1}T00.nc"
        fault(path)
        broken.append(path)
    forking.done(small, "-q")
    assert faults_of(small.night()) == []
    notes = small.report()["notes"]
    for path in broken:
        assert any(str(path) in note for note in notes), (path, notes)
    (limit,) = small.report()["limits"]
    assert limit["usual"]["nights"] == 12
    # Of 20 to 35 without 28 to 31, the nights of the first to the fourth.
    assert limit["usual"]["median"] == pytest.approx(25.5)
    aside = {path.name for path in (small.archive / "nights" / "set_aside").iterdir()}
    assert aside == {path.name for path in broken[:3]}
    assert broken[3].is_dir()
    page = (small.night() / "briefing.html").read_text(encoding="utf-8")
    assert "of the archive is broken" in page


@pytest.mark.slow
@pytest.mark.parametrize("fault", FAULTS)
def test_a_broken_file_of_scores(small, forking, fault):
    forking.done(small, "-q")
    scores = (small.night() / "scores.csv").read_bytes()
    path = small.archive / "scores" / "20310211T00.nc"
    whole = path.read_bytes()
    fault(path)
    shutil.rmtree(small.products)
    status, _ = forking.run(small, "-q")
    log = small.log()
    assert "Traceback" not in log
    assert "a fault of ours" not in log
    told = [*small.report()["notes"], log]
    assert any(path.name in text for text in told), told
    if fault is folder:
        assert path.is_dir()
        assert status in (0, 2)
    else:
        assert status == 0
        assert path.read_bytes() == whole, "verified anew"
    if status == 0:
        assert (small.night() / "scores.csv").read_bytes() == scores
        assert faults_of(small.night()) == []


@pytest.mark.slow
@pytest.mark.parametrize("fault", FAULTS)
def test_a_broken_file_of_tonight(small, forking, fault):
    """It is filed anew; a folder in its place is not removed, but named."""
    forking.done(small, "-q")
    path = small.archive / "nights" / TONIGHT
    whole = path.read_bytes()
    fault(path)
    if fault is folder:
        log = forking.done(small, "-q", status=2)
        assert f"ensemble-horizon: {path}: " in log
        assert small.report()["published"] is True
        path.rmdir()
    forking.done(small, "-q")
    assert path.read_bytes() == whole
    if fault is not folder:
        assert any(str(path) in note for note in small.report()["notes"])
    assert hidden_in(small.archive) == []


@pytest.mark.slow
def test_an_archive_that_is_a_file_or_nowhere(small, forking):
    small.archive.write_text("in the way", encoding="utf-8")
    log = forking.done(small, "-q", status=2)
    assert "ensemble-horizon: night.archive" in log
    assert str(small.archive) in log
    assert "move that file away" in log
    assert not small.night().exists()
    assert small.archive.read_text(encoding="utf-8") == "in the way"
    small.archive.unlink()
    small.archive = small.folder / "not" / "there" / "yet"
    small.settings(night='archive = "not/there/yet"')
    forking.done(small, "-q")
    assert (small.archive / "nights" / TONIGHT).is_file()


@pytest.mark.slow
def test_five_hundred_nights(small, monkeypatch):
    """Only as many files are opened as nights are wanted, and what is usual is that of numpy.

    Daily nights reach beyond a year, so that the thirty nights nearest in the time of year count:
    those of 365 days ago and fifteen or fourteen days around.
    """
    small.run("-q")
    tonight = np.datetime64("2031-02-14T00")
    ages = np.arange(1, 501)
    horizons = np.random.default_rng(5).uniform(10.0, 40.0, 500)
    monkeypatch.setattr(writing, "flush_to_disk", lambda path: None)
    fill(small, [tonight - np.timedelta64(int(age), "D") for age in ages], horizons)
    opened = small.folder / "opened.txt"
    small.run("-q", environ={"FAULT_OPENED": str(opened)})
    assert small.states()["estimate"] == "kept"
    assert small.states()["brief"] == "done"
    nights = str(small.archive / "nights")
    lines = opened.read_text(encoding="utf-8").splitlines()
    files = {line for line in lines if line.startswith(nights) and line.endswith(".nc")}
    assert 30 <= len(files - {f"{nights}/{TONIGHT}"}) <= 60

    distance = np.abs(ages - 365)
    order = np.lexsort((ages, distance))[:30]
    known = horizons[order]
    (limit,) = small.report()["limits"]
    usual = limit["usual"]
    assert usual["season"] is True
    assert usual["nights"] == 30
    # Definition 2 of Hyndman and Fan, which is the right one for nights that may be censored.
    wanted = np.quantile(known, [0.1, 0.5, 0.9], method="averaged_inverted_cdf")
    assert [usual["low"], usual["median"], usual["high"]] == pytest.approx(wanted.tolist())
    below = np.mean(known < limit["horizon"])
    assert usual["percentile"] == pytest.approx(100 * below)
    assert usual["standing"] == (
        "shorter" if limit["horizon"] < usual["low"]
        else "longer" if limit["horizon"] > usual["high"] else "usual"
    )  # fmt: skip
