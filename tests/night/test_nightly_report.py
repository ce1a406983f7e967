"""The report of a night, its exit status, and what the settings and files may be like."""

from __future__ import annotations

import json
import math

import pytest
from nightly_archive import light_briefing
from verification_archive import Archive

from ensemble_horizon.night.chain.report import number

TOP = {
    "schema": str, "version": str, "config": str, "status": str, "exit_status": int,
    "begun": str, "ended": str, "seconds": float, "start": (str, type(None)),
    "folder": (str, type(None)), "published": bool, "stages": list,
    "members": (dict, type(None)), "faults": list, "limits": list, "troubles": list,
    "notes": list, "error": (dict, type(None)),
}  # fmt: skip
STAGE = {"name", "state", "seconds", "files", "reason"}
LIMIT = {"variable", "place", "criterion", "status", "horizon", "low", "high", "units", "usual"}
USUAL = {"nights", "median", "low", "high", "percentile", "standing", "season"}
ERROR = {"kind", "culprit", "expected", "found", "remedy"}
STATES = {"done", "kept", "skipped", "failed", "not reached"}


def check(report: dict) -> dict:
    """Hold a report to the schema that the docstring of the module and the README tell."""
    assert report["schema"] == "ensemble-horizon night report 1"
    assert {key: isinstance(report[key], kind) for key, kind in TOP.items()} == dict.fromkeys(
        TOP, True
    )
    assert set(report) == set(TOP)
    assert report["status"] == ("done" if report["exit_status"] == 0 else "failed")
    assert (report["error"] is None) == (report["exit_status"] == 0)
    for stage in report["stages"]:
        assert set(stage) == STAGE
        assert stage["state"] in STATES
        if stage["state"] in ("skipped", "failed"):
            assert stage["reason"]
        elif not (stage["name"] == "verify" and report["troubles"]):
            assert stage["reason"] is None
    for limit in report["limits"]:
        assert set(limit) == LIMIT
        assert limit["usual"] is None or set(limit["usual"]) == USUAL
    for fault in report["faults"]:
        assert {"kind", "effect", "message"} <= set(fault)
    if report["members"] is not None:
        assert set(report["members"]) == {"used", "expected", "missing", "left_out"}
    if report["error"] is not None:
        assert set(report["error"]) == ERROR
        assert all(report["error"].values())
    return report


def test_the_report_of_a_night(nightly):
    nightly.run()
    report = check(nightly.report())
    assert report["start"] == "2031-02-14T00:00"
    assert report["members"] == {"used": 4, "expected": 4, "missing": [], "left_out": []}
    assert report["folder"] == str(nightly.night())
    (limit,) = report["limits"]
    assert (limit["variable"], limit["place"], limit["status"]) == ("t2", "domain", "reached")
    files = [name for stage in report["stages"] for name in stage["files"]]
    assert {"horizons.nc", "survey.json", "briefing.html"} <= set(files)
    assert sum(stage["seconds"] or 0 for stage in report["stages"]) <= report["seconds"]


def test_the_report_of_a_night_that_was_kept_says_as_much(nightly):
    nightly.run()
    first = check(nightly.report())
    nightly.run()
    second = check(nightly.report())
    for key in ("start", "members", "faults", "limits", "troubles", "notes"):
        assert second[key] == first[key], key


def test_missing_members_are_told_everywhere(nightly):
    nightly.settings(runs="members = 5\nminimum_members = 3")
    nightly.member(14, 2).write_bytes(nightly.member(14, 2).read_bytes()[:900])
    result = nightly.run("--start", "2031-02-14")
    report = check(nightly.report())
    assert report["members"] == {
        "used": 3, "expected": 5, "missing": [2, 4], "left_out": [],
    }  # fmt: skip
    assert any(fault.get("member") == 2 for fault in report["faults"])
    assert any("embers 2 and 4 had not come whole" in text for text in report["troubles"])
    page = (nightly.night() / "briefing.html").read_text()
    assert "3 of 5 members" in page
    assert "embers 2 and 4 had not come whole" in page
    assert "embers 2 and 4 had not come whole" in result.stderr


@pytest.mark.parametrize("policy, status", [("drop", 0), ("use", 0), ("stop", 3)])
def test_a_broken_member_is_dealt_with_as_the_settings_say(nightly, policy, status):
    nightly.settings(runs=f'minimum_members = 3\nincomplete = "{policy}"')
    nightly.member(14, 1).write_bytes(b"\x89HDF\r\n\x1a\n")
    nightly.run("--start", "2031-02-14", status=status)
    report = check(nightly.report())
    assert report["published"] is (status == 0)
    if status:
        assert "m01.nc" in report["error"]["found"]


def test_too_few_members(nightly, refusal):
    for member in (1, 2):
        nightly.member(14, member).unlink()
    refusal(nightly.run("-q", "--start", "2031-02-14", status=3), 3, "runs.minimum_members")
    report = check(nightly.report())
    assert report["published"] is False
    assert nightly.states()["survey"] == "failed"
    assert nightly.states()["estimate"] == "not reached"
    assert [path.name for path in nightly.products.iterdir()] == [".nightly.lock"]


def test_settings_without_the_table_are_refused(nightly, refusal):
    nightly.settings(night="")
    refusal(nightly.run("-q", status=2), 2, "night.archive", "[night]")
    report = check(nightly.report())
    assert report["stages"] == []
    assert not nightly.products.exists()


def test_settings_with_mistakes_are_reported_too(nightly):
    nightly.config.write_text("[runs]\nfile = 3\n[night]\nusual_nights = 4\n")
    nightly.run(status=2)
    report = check(nightly.report())
    assert "usual_nights" in report["error"]["found"]
    assert report["start"] is None


def test_a_fault_of_ours_is_reported(nightly, monkeypatch):
    def fail(*_):
        raise ZeroDivisionError("division by zero")

    monkeypatch.setattr("ensemble_horizon.night.chain.stages.write_estimate", fail)
    nightly.run(status=1)
    assert check(nightly.report())["error"]["kind"] == "ZeroDivisionError"
    monkeypatch.undo()
    monkeypatch.setattr("ensemble_horizon.night.chain.closing.write_briefing", light_briefing)
    nightly.run()
    assert nightly.states()["survey"] == "kept"


def test_a_run_that_is_stopped_is_reported(nightly, monkeypatch):
    def stop(*_):
        raise KeyboardInterrupt

    monkeypatch.setattr("ensemble_horizon.night.chain.stages.write_estimate", stop)
    nightly.run(status=130)
    assert check(nightly.report())["error"]["kind"] == "Stopped"


def test_a_report_that_cannot_be_written(nightly, refusal):
    nightly.report_file = nightly.config / "report.json"
    refusal(nightly.run("-q", status=2), 2, "report.json")
    assert nightly.night().is_dir()


def test_numbers_that_json_cannot_hold():
    values = [number(value) for value in (36, math.inf, math.nan)]
    assert json.dumps(values) == '[36.0, "beyond_run", null]'


def test_waiting_as_the_command_line_or_the_settings_say(nightly, monkeypatch):
    waited = []

    def choose(settings, start, minutes, clock, waited_for):
        waited.append(minutes)
        raise KeyboardInterrupt

    monkeypatch.setattr(
        "ensemble_horizon.night.chain.nightly.choose_start",
        lambda settings, start, minutes, clock, waited: choose(
            settings, start, minutes, clock, waited
        ),
    )
    nightly.run(status=130)
    nightly.settings(night='archive = "archive"\nwait_minutes = 45')
    nightly.run(status=130)
    nightly.run("--wait", "10", status=130)
    nightly.run("--wait", "0", status=130)
    assert waited == [0.0, 45.0, 10.0, 0.0]


@pytest.fixture
def past(tmp_path, monkeypatch) -> Archive:
    """Starts ten days apart, with analyses, and headers that tell starts and members."""
    monkeypatch.setattr("ensemble_horizon.night.chain.closing.write_briefing", light_briefing)
    archive = Archive(tmp_path, starts=12, members=5)
    archive.write()
    return archive


NIGHT = '[night]\narchive = "archive"\nverify_starts = 8'


def test_past_starts_are_verified_and_told(past, tmp_path):
    config, report_file = past.settings(NIGHT), tmp_path / "r.json"
    past.run("nightly", config, "--report", report_file)
    report = check(json.loads(report_file.read_text()))
    states = {stage["name"]: stage["state"] for stage in report["stages"]}
    assert set(states.values()) == {"done"}
    assert len(list((tmp_path / "archive" / "scores").glob("*.nc"))) == 8
    stamp = report["folder"]
    files = {name for stage in report["stages"] for name in stage["files"]}
    assert {"scores.csv", "scores.nc"} <= files
    assert (tmp_path / stamp / "scores.csv").is_file()
    past.run("nightly", config, "--report", report_file)
    report = check(json.loads(report_file.read_text()))
    assert {stage["state"] for stage in report["stages"]} == {"kept"}


def test_analyses_that_cannot_be_used_do_not_cost_the_night(past, tmp_path):
    config, report_file = past.settings(NIGHT), tmp_path / "r.json"
    analyses = tmp_path / "analyses.nc"
    content = analyses.read_bytes()
    analyses.write_text("no analyses")
    past.run("nightly", config, "--report", report_file)
    report = check(json.loads(report_file.read_text()))
    assert any("analyses" in text for text in report["troubles"])
    assert "analyses" in (tmp_path / "out" / "briefing.html").read_text()
    analyses.unlink()
    analyses.write_bytes(content)
    past.run("nightly", config, "--report", report_file)
    states = {
        stage["name"]: stage["state"] for stage in json.loads(report_file.read_text())["stages"]
    }
    assert states["verify"] == states["brief"] == "done"
    assert (tmp_path / "out" / "20310421T00" / "scores.csv").is_file()


def test_without_any_analysis_yet_there_is_a_night(past, tmp_path):
    text = past.settings(NIGHT).read_text(encoding="utf-8")
    config = tmp_path / "settings.toml"
    config.write_text(text.replace('"analyses.nc"', '"analyses/{start:%Y%m%d%H}.nc"'))
    past.run("nightly", config, "--report", tmp_path / "r.json")
    report = check(json.loads((tmp_path / "r.json").read_text()))
    assert any("analyses" in text for text in report["troubles"])


def test_a_calibration_in_force_is_told_on_the_page(past, tmp_path):
    past.run("verify", past.settings(), "--calibration", tmp_path / "factors.nc")
    past.run("nightly", past.settings(NIGHT, analyses=False))
    page = tmp_path / "out" / "briefing.html"
    assert "Calibration in force" not in page.read_text()
    config = past.settings(NIGHT + '\n[calibration]\nfile = "factors.nc"', analyses=False)
    past.run("nightly", config, "--report", tmp_path / "r.json")
    assert "Calibration in force" in page.read_text()
    report = json.loads((tmp_path / "r.json").read_text())
    states = {stage["name"]: stage["state"] for stage in report["stages"]}
    assert states["survey"] == "kept"
    assert states["estimate"] == "done"


def test_a_comparison_that_is_not_there_is_a_note(nightly):
    nightly.settings(night='archive = "archive"\nversions = "nowhere"')
    nightly.run()
    (note,) = check(nightly.report())["notes"]
    assert note.startswith("The comparison of versions cannot be shown: ")
    assert "nowhere" in note
