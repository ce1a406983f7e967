"""Folders that may not be written, a clock that is set back, and two runs at once."""

from __future__ import annotations

import contextlib
import os
import re
import shutil
import signal
import subprocess
import tempfile
import time
from pathlib import Path

import pytest
from small_night import SmallNight, faults_of, hidden_in

NOBODY = 65534
USER = NOBODY if os.geteuid() == 0 else 0

# Every look at the clock of the day finds it ten minutes earlier; other clocks run on.
BACKWARDS = """
#define _GNU_SOURCE
#include <dlfcn.h>
#include <stdlib.h>
#include <time.h>
static long looks;
int clock_gettime(clockid_t clock, struct timespec *found) {
    static int (*real)(clockid_t, struct timespec *);
    if (!real) real = dlsym(RTLD_NEXT, "clock_gettime");
    int status = real(clock, found);
    if (clock == CLOCK_REALTIME) found->tv_sec = atol(getenv("FAULT_CLOCK")) - 600 * looks++;
    return status;
}
"""


@pytest.fixture
def open_night():
    """A night in a folder that everybody may enter, unlike those of the tests."""
    folder = Path(tempfile.mkdtemp())
    folder.chmod(0o755)
    yield SmallNight(folder).write().settings()
    shutil.rmtree(folder)


@pytest.mark.slow
def test_a_product_folder_that_may_only_be_read(open_night, forking):
    night = open_night
    for path in (night.archive, night.folder / "reports"):
        path.mkdir()
        path.chmod(0o777)
    night.report_file = night.folder / "reports" / "report.json"
    night.products.mkdir()
    night.products.chmod(0o555)
    log = forking.done(night, "-q", status=2, user=USER)
    assert f"ensemble-horizon: {night.products}" in log
    assert f"no permission to write in {night.products}" in log
    assert night.report()["error"]["remedy"].startswith("ask for write permission there")
    assert list(night.products.iterdir()) == []
    night.products.chmod(0o777)
    forking.done(night, "-q", user=USER)
    assert faults_of(night.night()) == []


@pytest.mark.slow
def test_an_archive_that_may_only_be_read(open_night, forking):
    """The night is published; it is filed once that is allowed."""
    night = open_night
    night.settings(analyses=False)
    night.report_file = night.products / "report.json"
    for path in (night.products, night.archive, night.archive / "nights"):
        path.mkdir()
        path.chmod(0o777)
    (night.archive / "nights").chmod(0o555)
    log = forking.done(night, "-q", status=2, user=USER)
    assert f"no permission to write in {night.archive / 'nights'}" in log
    assert night.states()["archive"] == "failed"
    assert night.report()["published"] is True
    assert faults_of(night.night()) == []
    assert list((night.archive / "nights").iterdir()) == []
    (night.archive / "nights").chmod(0o777)
    forking.done(night, "-q", user=USER)
    assert night.states()["archive"] == "done"
    assert night.states()["brief"] == "kept"


@pytest.fixture
def backwards(tmp_path) -> str:
    """A library that sets the clock of a process back, again and again."""
    source, library = tmp_path / "clock.c", tmp_path / "clock.so"
    source.write_text(BACKWARDS, encoding="utf-8")
    compiler = shutil.which("cc") or shutil.which("gcc")
    if compiler is None:
        pytest.skip("no C compiler here")
    subprocess.run([compiler, "-shared", "-fPIC", "-o", library, source, "-ldl"], check=True)
    return str(library)


def clock(library: str, year: int) -> dict[str, str]:
    """The surroundings of a run whose clock begins in a year, and goes back from there."""
    return {
        "LD_PRELOAD": library,
        "FAULT_CLOCK": str((year - 1970) * 31_556_952),
        "SOURCE_DATE_EPOCH": "",
    }


def times(log: str) -> list[str]:
    return re.findall(r"^\d{4}-\d\d-\d\d \d\d:\d\d:\d\d", log, re.MULTILINE)


@pytest.mark.slow
def test_a_clock_that_is_set_back_all_the_time(small, backwards):
    """A member is late, so that the chain waits; files are of the future; the waiting ends."""
    small.member(3).unlink()
    for path in small.folder.rglob("*.nc"):
        os.utime(path, (4e9, 4e9))
    log = small.run("-v", "--wait", "0.05", environ=clock(backwards, 2035))
    found = times(log)
    assert found == sorted(found, reverse=True)
    assert found[0] > found[-1], "the clock was not set back"
    assert "waiting at start 2031-02-14T00:00 for member 3" in log
    assert faults_of(small.night()) == []
    report = small.report()
    assert report["ended"] < report["begun"]
    assert report["seconds"] >= 3
    assert all(stage["seconds"] is None or stage["seconds"] >= 0 for stage in report["stages"])
    made = small.made()
    small.run("-v", "--start", "2031-02-14T00", environ=clock(backwards, 2001))
    assert set(small.states().values()) == {"kept"}, "nothing is out of date by a clock"
    small.write_member(3)
    os.utime(small.member(3), (0, 0))
    small.run("-v", environ=clock(backwards, 1999))
    assert small.states()["estimate"] == "done", "a file of the past is new all the same"
    assert small.report()["members"]["used"] == 4
    assert faults_of(small.night()) == []
    assert small.made().keys() == made.keys()


@pytest.mark.slow
def test_two_runs_at_once(small):
    """The first is stopped amid its work: a second leaves, or waits and finds all done."""
    fifo = small.folder / "go_on"
    os.mkfifo(fifo)
    pause = {"FAULT_PAUSE_AT": "stage estimate done", "FAULT_FIFO": str(fifo)}
    first = small.start("-v", environ=pause)
    try:
        go_on = fifo.open("w")  # once the first one reads
        second = SmallNight(small.folder)
        second.log_file, second.report_file = small.folder / "log2", small.folder / "report2"
        log = second.run("-q", status=2)
        assert f"ensemble-horizon: {small.products}: expected no other run at work there" in log
        assert f"process {first.pid} on " in log
        assert "--if-busy wait" in log
        waiting = second.start("-v", "--if-busy", "wait")
        for _ in range(1000):
            if "waiting for process" in second.log():
                break
            assert waiting.poll() is None, second.log()
            time.sleep(0.05)
        assert not small.night().exists()
        go_on.close()
        assert first.wait(120) == 0, small.log()
        assert waiting.wait(120) == 0, second.log()
    finally:
        for process in (first, locals().get("waiting")):
            if process is not None and process.poll() is None:
                with contextlib.suppress(ProcessLookupError):
                    os.killpg(process.pid, signal.SIGKILL)
    assert set(small.states().values()) == {"done"}
    assert set(second.states().values()) == {"kept"}
    assert faults_of(small.night()) == []
    assert hidden_in(small.products, small.archive) == []
