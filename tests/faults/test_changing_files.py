"""Members that are cut, damaged or replaced while the job reads them.

The job stops at a line of its log until the fault is done, so that nothing hangs on timing.
"""

from __future__ import annotations

import contextlib
import csv
import errno
import os
import signal
import time
from collections.abc import Callable, Iterator
from pathlib import Path

import netCDF4
import pytest
from small_night import SmallNight, faults_of, hidden_in

from ensemble_horizon.runs.handles import LOCK, Handles

TWO = """
[variables.t2]
criteria = [{tolerance = 1.5}]
[variables.u2]
criteria = [{tolerance = 1.5}]
"""
TABLES = ("horizons.csv", "survey.json", "scores.csv")
FIRST, BETWEEN, READING = "night 2031", "stage survey done", "reading t2"


@pytest.fixture
def small(tmp_path: Path) -> SmallNight:
    night = SmallNight(tmp_path).write((12, 13, 14), names=("t2", "u2"))
    return night.settings(TWO, analyses=False)


def replaced(night: SmallNight) -> None:
    """By another file of the same time of modification, with a rename."""
    status = night.member(2).stat()
    night.write_member(2, names=("t2", "u2"), shift=0.3)
    os.utime(night.member(2), ns=(status.st_atime_ns, status.st_mtime_ns))


def truncated(night: SmallNight) -> None:
    path = night.member(2)
    os.truncate(path, path.stat().st_size * 2 // 3)


def flipped(night: SmallNight) -> None:
    """One bit in the middle of the compressed values, and the time of modification kept."""
    path = night.member(2)
    status, content = path.stat(), path.read_bytes()
    # zlib streams of HDF5 begin with 78 5e at its default level 4.
    streams = [n for n in range(len(content) - 1) if content[n : n + 2] == b"\x78\x5e"]
    place = streams[-1] + 100
    with path.open("r+b") as file:
        file.seek(place)
        file.write(bytes([content[place] ^ 1]))
    os.utime(path, ns=(status.st_atime_ns, status.st_mtime_ns))


def paused(night: SmallNight, words: str, act: Callable[[int], None], status: int) -> str:
    """A night that stops at each line of its log with ``words`` while ``act`` is done."""
    fifo = night.folder / "go_on"
    os.mkfifo(fifo)
    process = night.start("-v", environ={"FAULT_PAUSE_AT": words, "FAULT_FIFO": str(fifo)})
    try:
        for number, go_on in enumerate(_pauses(fifo, process)):
            act(number)
            os.close(go_on)
    finally:
        with contextlib.suppress(ProcessLookupError):
            os.killpg(process.pid, signal.SIGKILL)
    log = night.log()
    assert process.wait() == status, log
    assert "Traceback" not in log, log
    assert "a fault of ours" not in log, log
    return log


def _pauses(fifo: Path, process) -> Iterator[int]:
    """A descriptor for each pause; to close it ends the pause."""
    for _ in range(4000):
        if process.poll() is not None:
            return
        try:
            yield os.open(fifo, os.O_WRONLY | os.O_NONBLOCK)
        except OSError as error:
            if error.errno != errno.ENXIO:  # nobody reads yet
                raise
        time.sleep(0.03)
    raise AssertionError("the night does not end")


def tables(night: SmallNight) -> dict[str, bytes]:
    return {p.name: p.read_bytes() for p in night.night().iterdir() if p.name in TABLES}


@pytest.mark.slow
@pytest.mark.parametrize("words", [FIRST, BETWEEN, READING])
def test_a_file_replaced_midway_is_read_anew_by_all_stages(small, forking, words):
    """Products are those of a night that saw only the new file; the old ones differ."""
    forking.done(small, "-q")
    old = tables(small)
    small.products.rename(small.folder / "old")
    log = paused(small, words, lambda number: replaced(small) if number == 0 else None, 0)
    assert ("m2.nc changed while it was read" in log) == (words != FIRST)
    found = tables(small)
    assert found["horizons.csv"] != old["horizons.csv"]
    assert faults_of(small.night()) == []
    forking.done(small, "-q")
    assert set(small.states().values()) == {"kept", "skipped"}, "all rests on the new file"
    small.products.rename(small.folder / "midway")
    forking.done(small, "-q")
    assert tables(small) == found


@pytest.mark.slow
@pytest.mark.parametrize("words", [BETWEEN, READING])
@pytest.mark.parametrize("fault", [truncated, flipped])
def test_a_file_damaged_midway_is_named_and_not_used(small, forking, fault, words):
    """Without it three members are left, which is enough: the night is made of them and says so."""
    log = paused(small, words, lambda number: fault(small) if number == 0 else None, 0)
    assert "m2.nc changed while it was read" in log
    report = small.report()
    faults = [item for item in report["faults"] if item.get("member") == 2]
    faults += [item for item in report["faults"] if item.get("file") == str(small.member(2))]
    assert faults != []
    assert any("m2.nc" in text or "Member 2" in text for text in report["troubles"])
    with (small.night() / "horizons.csv").open(newline="", encoding="utf-8") as file:
        members = {row["variable"]: row["members"] for row in csv.DictReader(file)}
    # The flipped bit is one of the second variable; the first can be read in full.
    assert members == {"t2": "4" if fault is flipped else "3", "u2": "3"}
    assert faults_of(small.night()) == []
    midway = tables(small)["horizons.csv"]
    small.products.rename(small.folder / "midway")
    forking.done(small, "-q", "--start", "2031-02-14T00")
    assert tables(small)["horizons.csv"] == midway


@pytest.mark.slow
def test_a_file_that_never_rests_ends_the_night(small, forking):
    log = paused(small, READING, lambda number: replaced(small), 3)
    assert f"{small.member(2)}: expected a file that stays as it is" in log
    assert "changed in each of 3 attempts" in log
    assert not small.night().exists()
    assert small.report()["exit_status"] == 3
    forking.done(small, "-q")
    assert faults_of(small.night()) == []
    assert hidden_in(small.products, small.archive) == []


def test_an_open_file_is_not_taken_for_its_successor(tmp_path):
    """Same name, size and time of modification, as after a copy that keeps times."""
    handles, path = Handles(), tmp_path / "m.nc"
    aside = tmp_path / "new.nc"
    for value in (1.0, 2.0):
        with netCDF4.Dataset(aside, "w") as file:
            file.createVariable("t2", "f8")[...] = value
        os.utime(aside, ns=(0, 0))
        assert not path.exists() or path.stat().st_size == aside.stat().st_size
        aside.replace(path)
        with LOCK:
            assert handles.get(str(path)).dataset["t2"][...] == value
    with LOCK:
        handles.clear()
