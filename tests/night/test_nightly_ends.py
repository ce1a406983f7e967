"""How a night ends: asked to end by a signal, refused a file, or with trouble in the truth."""

from __future__ import annotations

import errno
import json
import os
import signal
import subprocess
import sys

import pytest
from nightly_archive import Nightly, contents, light_briefing
from test_nightly_report import check
from verification_archive import Archive

from ensemble_horizon.night.chain.lock import LOCK_FILE
from ensemble_horizon.night.chain.stages import EstimateStage

NIGHT = '[night]\narchive = "archive"\nverify_starts = 8'
AT_WORK = """
import sys, time
from ensemble_horizon.cli.main import main
from ensemble_horizon.night.chain import stages

def work(folder, *rest):
    (folder / "horizons.csv").write_text("half")
    print("at work", flush=True)
    time.sleep(300)

if sys.argv[1] == "estimate":
    stages.write_estimate = work
main(sys.argv[2:])
"""


@pytest.fixture
def past(tmp_path, monkeypatch) -> Archive:
    """Starts ten days apart, with analyses."""
    monkeypatch.setattr("ensemble_horizon.night.chain.closing.write_briefing", light_briefing)
    archive = Archive(tmp_path, starts=8, members=5)
    archive.write()
    return archive


def started(nightly: Nightly, where: str, *more: str) -> subprocess.Popen[str]:
    arguments = ["nightly", str(nightly.config), "--report", str(nightly.report_file), *more]
    return subprocess.Popen(
        [sys.executable, "-c", AT_WORK, where, *arguments],
        stdout=subprocess.PIPE, stderr=subprocess.PIPE, text=True, start_new_session=True,
    )  # fmt: skip


def ended(process: subprocess.Popen[str]) -> str:
    try:
        return process.communicate(timeout=60)[1]
    finally:
        process.kill()


def test_a_process_that_is_asked_to_end_reports_and_leaves_nothing_half_written(nightly):
    process = started(nightly, "estimate")
    assert process.stdout is not None
    assert process.stdout.readline() == "at work\n"
    process.send_signal(signal.SIGTERM)
    log = ended(process)
    assert process.returncode == 143, log
    assert "Traceback" not in log
    assert log.splitlines()[-1].startswith("ensemble-horizon: asked to end; ")
    report = check(nightly.report())
    assert (report["exit_status"], report["error"]["kind"]) == (143, "Stopped")
    assert nightly.states()["estimate"] == "failed"
    assert not nightly.night().exists()
    assert {path.name for path in nightly.products.iterdir()} == {LOCK_FILE, ".20310214T00.work"}
    left = {name.split("/")[0] for name in contents(nightly.products / ".20310214T00.work")}
    assert left == {"attempt.json", "survey"}
    nightly.run()
    assert nightly.states() == {
        "survey": "kept", "estimate": "done", "verify": "skipped", "brief": "done",
        "archive": "done",
    }  # fmt: skip


def test_one_that_waits_ends_at_once_and_leaves_no_trace(nightly):
    nightly.member(14, 3).unlink()
    process = started(nightly, "nowhere", "--wait", "30", "--start", "2031-02-14")
    assert process.stderr is not None
    while "waiting at start" not in (line := process.stderr.readline()):
        assert line, "it ended without waiting"
    os.killpg(process.pid, signal.SIGTERM)  # as systemd does, to all processes of a unit
    log = ended(process)
    assert process.returncode == 143, log
    report = check(nightly.report())
    assert (report["start"], report["error"]["kind"]) == ("2031-02-14", "Stopped")
    assert {path.name for path in nightly.products.iterdir()} == {LOCK_FILE}


def test_the_signal_is_what_it_was_after_the_command(nightly):
    before = signal.getsignal(signal.SIGTERM)
    nightly.run()
    assert signal.getsignal(signal.SIGTERM) is before


@pytest.mark.parametrize(
    "number, status, culprit, words",
    [
        (errno.EACCES, 3, "{member}", "permission denied"),
        (errno.EIO, 3, "{member}", "input/output error"),
        (errno.ENOSPC, 2, "{folder}", "is full"),
        (errno.EROFS, 2, "{folder}", "read-only"),
        (errno.EMFILE, 1, "the system", "too many open files"),
    ],
)
def test_what_cannot_be_read_is_not_told_as_what_cannot_be_written(
    nightly, monkeypatch, refusal, number, status, culprit, words
):
    """An error of the system from within a stage; with the name of the file, where it has one."""
    member = str(nightly.member(14, 2))

    def fail(self, work, folder):
        named = () if number == errno.EMFILE else (member,)
        raise OSError(number, os.strerror(number), *named)

    monkeypatch.setattr(EstimateStage, "run", fail)
    text = refusal(nightly.run("-q", status=status), status, words)
    expected = culprit.format(member=member, folder=nightly.night())
    assert text.startswith(f"ensemble-horizon: {expected}")
    assert nightly.states()["estimate"] == "failed"
    assert ("written" in text or "disk" in text.partition(" Next")[0]) == (status == 2)


def test_a_start_that_was_asked_for_is_named_in_the_report_of_a_failure(nightly):
    nightly.run("--start", "2031-02-20 06Z", status=3)
    assert check(nightly.report())["start"] == "2031-02-20T06:00"
    nightly.run("--start", "tomorrow", status=2)
    assert check(nightly.report())["start"] is None
    nightly.config.write_text("[runs]")
    nightly.run("--start", "2031-02-20", status=2)
    assert check(nightly.report())["start"] == "2031-02-20"


def test_a_limit_beyond_the_run_is_told_as_that(nightly):
    nightly.settings(tolerance=500)
    nightly.run()
    (limit,) = check(nightly.report())["limits"]
    assert (limit["status"], limit["horizon"]) == ("beyond_run", "beyond_run")


def test_a_member_that_is_left_out_for_its_values_is_told(nightly):
    """It is there, header and all, and so it is not missing."""
    import netCDF4

    with netCDF4.Dataset(nightly.member(14, 2), "a") as file:
        file["t2"][1] = float("nan")
    nightly.run("--start", "2031-02-14")
    report = check(nightly.report())
    assert report["members"] == {"used": 3, "expected": 4, "missing": [], "left_out": [2]}
    nightly.run("--start", "2031-02-14")
    assert nightly.states()["estimate"] == "kept"
    assert nightly.report()["members"] == report["members"]


def test_a_night_made_again_tells_how_it_was_chosen_now(nightly):
    """Passed over at first, then asked for by name: the page is made anew, the estimate is not."""
    nightly.member(14, 3).unlink()
    nightly.settings(runs="members = 4\nminimum_members = 2")
    nightly.run()
    page = nightly.night("20310213T00") / "briefing.html"
    assert "2031-02-14T00:00 was passed over" in page.read_text()
    nightly.run("--start", "2031-02-13")
    assert nightly.states() == {
        "survey": "kept", "estimate": "kept", "verify": "skipped", "brief": "done",
        "archive": "kept",
    }  # fmt: skip
    assert "passed over" not in page.read_text()
    assert nightly.report()["troubles"] == []


def test_a_night_that_was_waited_for_is_kept_without_waiting(nightly):
    nightly.member(14, 3).unlink()
    nightly.run("--start", "2031-02-14", "--wait", "0.01")
    (text,) = check(nightly.report())["troubles"]
    assert text == "Member 3 had not come whole; the night was made with what was there."
    nightly.run("--start", "2031-02-14")
    assert nightly.report()["troubles"] == [text]
    assert nightly.states()["brief"] == "kept"


def past_report(past: Archive, config, *options: object) -> tuple[dict, str]:
    file = past.folder / "r.json"
    result = past.run("nightly", config, "--report", file, *options)
    return check(json.loads(file.read_text(encoding="utf-8"))), result.stderr


def of_verify(report: dict) -> tuple[str, str | None]:
    (stage,) = (stage for stage in report["stages"] if stage["name"] == "verify")
    return stage["state"], stage["reason"]


def test_analyses_that_are_gone_are_a_trouble_and_a_warning(past, tmp_path):
    config = past.settings(NIGHT)
    past_report(past, config, "--start", "2031-03-02")
    (tmp_path / "analyses.nc").rename(tmp_path / "gone.nc")
    report, log = past_report(past, config)
    state, reason = of_verify(report)
    assert state == "done"
    assert reason is not None
    assert reason.startswith(
        "No further past start could be verified; the scores are of the 6 starts in the archive. "
    )
    assert "analyses.nc" in reason
    assert report["troubles"] == [reason]
    assert f" WARNING {reason}" in log
    assert reason in (tmp_path / "out" / "briefing.html").read_text()
    again, _ = past_report(past, config)
    assert of_verify(again) == ("kept", reason)
    assert again["troubles"] == [reason]


def test_the_first_night_has_nothing_to_verify_yet_and_says_so(past, tmp_path):
    config = past.settings(NIGHT)
    report, log = past_report(past, config, "--start", "2031-01-01")
    assert of_verify(report) == ("skipped", "no start has become verifiable yet")
    assert report["troubles"] == []
    assert "INFO stage verify skipped: no start has become verifiable yet" in log
    assert "No past start is verified" in (tmp_path / "out" / "briefing.html").read_text()
    again, _ = past_report(past, config, "--start", "2031-01-01")
    assert of_verify(again) == of_verify(report)
    assert {stage["state"] for stage in again["stages"]} == {"kept", "skipped"}
