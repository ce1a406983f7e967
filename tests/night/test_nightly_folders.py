"""Two runs at once, publishing that fails or is cut short, and what a killed run leaves behind."""

from __future__ import annotations

import fcntl
import json
import os
import subprocess
import sys
from pathlib import Path

import pytest
from nightly_archive import contents

from ensemble_horizon.errors import ProductError
from ensemble_horizon.night.chain.lock import LOCK_FILE, locked
from ensemble_horizon.night.chain.stages import EstimateStage
from ensemble_horizon.products.writing import product_error

HOLD = """
import logging, os, sys
from pathlib import Path
from ensemble_horizon.night.chain.lock import locked
logging.getLogger("ensemble_horizon").setLevel(logging.INFO)
logging.basicConfig(format="%(message)s", stream=sys.stdout)
with locked(Path(sys.argv[1]), sys.argv[2], "2031-02-14T06:00:00Z"):
    if sys.argv[3:] and not os.fork():
        sys.stdin.read()
        os._exit(0)
    print("held", flush=True)
    sys.stdin.readline()
"""


def said(process: subprocess.Popen[str]) -> str:
    assert process.stdout is not None
    return process.stdout.readline()


@pytest.fixture
def holder(tmp_path):
    """A function that starts a process which holds the lock of a folder."""
    running = []

    def hold(folder: Path, *more: str, if_busy: str = "leave") -> subprocess.Popen[str]:
        process = subprocess.Popen(
            [sys.executable, "-c", HOLD, str(folder), if_busy, *more],
            stdin=subprocess.PIPE, stdout=subprocess.PIPE, text=True,
        )  # fmt: skip
        running.append(process)
        assert if_busy == "wait" or said(process) == "held\n"
        return process

    yield hold
    for process in running:
        process.kill()
        process.communicate()


def test_a_second_run_leaves_with_a_clear_message(nightly, holder, refusal):
    process = holder(nightly.products)
    result = nightly.run("-q", status=2)
    refusal(result, 2, str(nightly.products), f"process {process.pid} on ", "--if-busy wait")
    assert nightly.report()["error"]["kind"] == "ProductError"
    assert nightly.report()["start"] is None
    assert set(nightly.states().values()) == {"not reached"}


def test_a_second_run_waits_if_asked(tmp_path, holder):
    first = holder(tmp_path)
    second = holder(tmp_path, if_busy="wait")
    text = said(second)
    assert text.startswith(f"waiting for process {first.pid} on ")
    assert text.endswith(f", at work since 2031-02-14T06:00:00Z in {tmp_path}\n")
    assert second.poll() is None
    first.communicate("\n")
    assert said(second) == "held\n"


def test_the_archive_is_locked_as_well(nightly, holder):
    holder(nightly.archive)
    assert "archive" in nightly.run(status=2).stderr


def test_the_lock_of_a_killed_run_is_none(nightly, holder):
    process = holder(nightly.products)
    process.kill()
    process.wait()
    assert (nightly.products / LOCK_FILE).stat().st_size > 0
    nightly.run()


def test_a_worker_does_not_hold_the_lock_of_its_parent(tmp_path, holder):
    """A child of the holder outlives it, with a copy of the open file that it closed at once."""
    process = holder(tmp_path, "and a child")
    process.kill()
    process.wait()
    with locked(tmp_path, "leave", "now"):
        pass


def test_a_file_system_without_locks_is_named(tmp_path, monkeypatch):
    def refuse(*_):
        raise OSError(37, "No locks available")

    monkeypatch.setattr(fcntl, "flock", refuse)
    words = r"keeps locks.*No locks available.*local disk"
    with pytest.raises(ProductError, match=words), locked(tmp_path, "leave", "now"):
        pass


@pytest.mark.skipif(os.geteuid() == 0, reason="root writes where nobody may")
def test_a_folder_that_cannot_be_written_is_named(nightly, refusal):
    nightly.products.mkdir(mode=0o555)
    refusal(nightly.run("-q", status=2), 2, "no permission to write", str(nightly.products))


def test_a_disk_that_is_full_is_told_without_hidden_names(nightly, monkeypatch, refusal):
    def fill(folder, *_):
        raise product_error(folder / "horizons.nc", OSError(28, "No space left on device"))

    monkeypatch.setattr("ensemble_horizon.night.chain.stages.write_estimate", fill)
    text = refusal(nightly.run("-q", status=2), 2, "horizons.nc", "is full")
    assert f"{nightly.night()}/horizons.nc: " in text
    assert ".work" not in text
    assert ".part" not in text


@pytest.mark.parametrize("number", range(4))
def test_a_rename_that_fails_loses_nothing_and_the_next_run_mends_it(nightly, monkeypatch, number):
    """A night stands and is done again; each rename from the product folder's door fails once."""
    nightly.run()
    before = contents(nightly.night())
    nightly.settings(title="Another")
    with monkeypatch.context() as patch:
        calls = []
        real = Path.rename

        def rename(self, target):
            if ".20310214T00." in str(self) + str(target) or self == nightly.night():
                calls.append((self, target))
                if len(calls) == number + 1:
                    raise OSError(5, "Input/output error")
            return real(self, target)

        patch.setattr(Path, "rename", rename)
        nightly.run(status=2)
    assert contents(nightly.night()) == before
    nightly.run()
    assert b"Another" in (nightly.night() / "briefing.html").read_bytes()
    assert [p.name for p in nightly.products.iterdir() if p.name.startswith(".")] == [LOCK_FILE]


def test_a_night_half_replaced_comes_back(nightly):
    """As a kill between the two renames leaves it: the old night away, the new not yet in."""
    nightly.run()
    before = contents(nightly.night())
    nightly.night().rename(nightly.products / ".20310214T00.old")
    result = nightly.run()
    assert "half replaced" in result.stderr
    assert contents(nightly.night()) == before
    assert set(nightly.states().values()) == {"kept", "skipped"}
    assert any("half replaced" in note for note in nightly.report()["notes"])


def test_what_a_killed_run_left_goes_and_nothing_else(nightly):
    nightly.run()
    before = contents(nightly.folder)
    ours = [
        nightly.products / ".20310214T00.work" / ".estimate.0011aabb.part" / "horizons.nc",
        nightly.products / ".20310213T00.work" / "attempt.json",
        nightly.products / ".20310214T00.old" / "horizons.nc",
        nightly.products / ".briefing.0011aabb.part.html",
        nightly.archive / "nights" / ".20310214T00.0011aabb.part.nc",
        nightly.archive / "scores" / ".20310204T00.0011aabb.part.nc",
    ]
    foreign = [
        nightly.products / ".mine",
        nightly.products / ".20310214.old" / "mine",
        nightly.products / ".notes.0011aabb.part.txt",
        nightly.archive / "nights" / ".mine.part.nc",
    ]
    for path in (*ours, *foreign):
        path.parent.mkdir(parents=True, exist_ok=True)
        path.write_text("left")
    nightly.run()
    assert not [path for path in ours if path.exists()]
    assert [path for path in foreign if path.exists()] == foreign
    for path in foreign:
        path.unlink()
    after = contents(nightly.folder)
    assert {**after, "report.json": b""} == {**before, "report.json": b""}


def test_the_archive_is_filed_by_the_next_run_if_this_one_cannot(nightly, refusal):
    nightly.archive.mkdir()
    (nightly.archive / "nights").write_text("in the way")
    refusal(nightly.run("-q", status=2), 2, "nights", "a file stands in the way")
    assert nightly.states()["archive"] == "failed"
    assert nightly.report()["published"] is True
    assert (nightly.products / "briefing.html").is_file()
    (nightly.archive / "nights").unlink()
    nightly.run()
    assert nightly.states()["archive"] == "done"
    assert set(nightly.states().values()) == {"kept", "skipped", "done"}


def test_files_that_change_while_a_stage_reads_are_read_again(nightly, monkeypatch):
    """The last member is replaced under the first estimate; the second is of the new one."""
    real, calls = EstimateStage.run, []

    def run(self, work, folder):
        calls.append(1)
        found = real(self, work, folder)
        if len(calls) == 1:
            nightly.member(14, 3).unlink()
            nightly.write_one(14, 3)
        return found

    monkeypatch.setattr(EstimateStage, "run", run)
    result = nightly.run()
    assert len(calls) == 2
    assert "m03.nc changed while it was read" in result.stderr


def test_files_that_never_rest_end_the_night(nightly, monkeypatch, refusal):
    real, calls = EstimateStage.run, []

    def run(self, work, folder):
        calls.append(1)
        found = real(self, work, folder)
        os.utime(nightly.member(14, 3), ns=(0, len(calls)))
        return found

    monkeypatch.setattr(EstimateStage, "run", run)
    refusal(nightly.run("-q", status=3), 3, "m03.nc", "changed in each of 3 attempts", "--wait")
    assert len(calls) == 3
    assert not nightly.night().exists()


@pytest.mark.slow
def test_one_run_after_another_of_two_processes_makes_one_night(nightly):
    """Two real processes at once: one does the work, the other waits and finds it done."""
    config = str(nightly.config)
    command = [sys.executable, "-m", "ensemble_horizon", "nightly", config, "--if-busy", "wait"]
    both = [
        subprocess.Popen([*command, "--report", str(nightly.folder / f"{number}.json")],
                         stderr=subprocess.PIPE, text=True)
        for number in range(2)
    ]  # fmt: skip
    for process in both:
        process.communicate(timeout=120)
        assert process.returncode == 0
    states = []
    for number in range(2):
        report = json.loads((nightly.folder / f"{number}.json").read_text(encoding="utf-8"))
        states.append([stage["state"] for stage in report["stages"]])
    done = ["done", "done", "skipped", "done", "done"]
    assert sorted(states) == [done, ["kept", "kept", "skipped", "kept", "kept"]]
