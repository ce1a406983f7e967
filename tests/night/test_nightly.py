"""The nightly chain: what it makes, what it keeps, and what it does again."""

from __future__ import annotations

import json
import os
import shutil
from dataclasses import replace

import numpy as np
import pytest
from nightly_archive import MADE, Nightly, contents, light_briefing

from ensemble_horizon.night.chain import nightly as chain
from ensemble_horizon.night.engine import Engine
from ensemble_horizon.night.input import open_input
from ensemble_horizon.night.reading import ReadingContext, read_start
from ensemble_horizon.night.variables import layout_of, resolve_places, resolve_variable
from ensemble_horizon.products.night_file import read_night_file, write_night_file
from ensemble_horizon.runs import handles
from ensemble_horizon.settings import read_settings

DONE = {
    "survey": "done", "estimate": "done", "verify": "skipped", "brief": "done", "archive": "done",
}  # fmt: skip
KEPT = {name: state.replace("done", "kept") for name, state in DONE.items()}


@pytest.fixture
def whole_nightly(tmp_path, monkeypatch) -> Nightly:
    """Three starts, and the real page and sheet."""
    monkeypatch.setenv("SOURCE_DATE_EPOCH", MADE)
    made = Nightly(tmp_path)
    made.write(12, 13, 14)
    made.settings()
    return made


@pytest.fixture
def nightly(whole_nightly, monkeypatch) -> Nightly:
    """The same with a page and a sheet that are made at once."""
    monkeypatch.setattr("ensemble_horizon.night.chain.closing.write_briefing", light_briefing)
    return whole_nightly


def test_a_night_stands_in_a_folder_of_its_own(whole_nightly):
    nightly = whole_nightly
    result = nightly.run()
    assert nightly.states() == DONE
    names = set(contents(nightly.night()))
    assert names == {
        "horizons.csv", "horizons.nc", "README.txt", "survey.json", "briefing.html",
        "briefing.pdf", "night.json",
    }  # fmt: skip
    for name in ("briefing.html", "briefing.pdf"):
        copy = (nightly.products / name).read_bytes()
        assert copy == (nightly.night() / name).read_bytes()
    assert set(contents(nightly.archive)) == {"nights/20310214T00.nc", "owner.json"}
    hidden = [path.name for path in nightly.products.iterdir() if path.name.startswith(".")]
    assert hidden == [".nightly.lock"]
    for line in ("stage survey done ", "stage verify skipped: ", "stage archive done "):
        assert line in result.stderr


def test_only_the_files_of_the_start_in_question_are_opened(nightly, monkeypatch):
    opened = []
    real = handles.netCDF4.Dataset

    def watched(path, *rest, **options):
        opened.append(str(path))
        return real(path, *rest, **options)

    monkeypatch.setattr(handles.netCDF4, "Dataset", watched)
    nightly.run()
    assert any("2031021400" in path for path in opened)
    assert not [path for path in opened if "2031021300" in path or "2031021200" in path]


def test_nothing_is_done_twice(nightly, monkeypatch):
    nightly.run()
    before = contents(nightly.folder)
    times = {path: path.stat().st_mtime_ns for path in nightly.night().rglob("*")}

    def refuse(*_, **__):
        raise AssertionError("a value was read")

    monkeypatch.setattr("ensemble_horizon.runs.catalogue.read_source", refuse)
    nightly.run()
    assert nightly.states() == KEPT
    after = contents(nightly.folder)
    assert {k: v for k, v in after.items() if k != "report.json"} == {
        k: v for k, v in before.items() if k != "report.json"
    }
    assert {path: path.stat().st_mtime_ns for path in nightly.night().rglob("*")} == times


def test_another_title_is_another_page_and_nothing_more(whole_nightly):
    nightly = whole_nightly
    nightly.run()
    before = contents(nightly.night())
    nightly.settings(title="Another <b>title")
    nightly.run()
    assert nightly.states() == {**KEPT, "brief": "done"}
    after = contents(nightly.night())
    changed = {name for name in after if after[name] != before.get(name)}
    assert changed == {"briefing.html", "briefing.pdf", "night.json"}
    assert b"Another &lt;b&gt;title" in after["briefing.html"]
    assert (nightly.products / "briefing.html").read_bytes() == after["briefing.html"]


def test_another_criterion_is_another_estimate_and_not_another_survey(nightly):
    nightly.run()
    nightly.settings(tolerance=2.5)
    nightly.run()
    assert nightly.states() == {**DONE, "survey": "kept"}


def test_a_member_that_was_written_anew_is_read_anew(nightly):
    nightly.run()
    path = nightly.member(14, 2)
    status = path.stat()
    content = path.read_bytes()
    path.unlink()
    path.write_bytes(content)
    os.utime(path, ns=(status.st_atime_ns, status.st_mtime_ns + 1))
    nightly.run()
    assert nightly.states() == {**DONE, "archive": "kept"}


@pytest.mark.parametrize("name", ["horizons.nc", "briefing.html", "survey.json"])
def test_a_product_that_somebody_changed_is_made_again(nightly, name):
    nightly.run()
    before = contents(nightly.folder)
    path = nightly.night() / name
    path.write_bytes(path.read_bytes()[:-1] + b"?")
    nightly.run()
    after = contents(nightly.folder)
    assert {**after, "report.json": b""} == {**before, "report.json": b""}
    assert list(nightly.states().values()).count("done") == 1


def test_a_damaged_state_is_none(nightly):
    nightly.run()
    before = contents(nightly.night())
    path = nightly.night() / "night.json"
    path.write_text(path.read_text().replace('"survey"', '"svrvey"', 1))
    nightly.run()
    assert nightly.states() == {**DONE, "archive": "kept"}
    assert contents(nightly.night()) == before


def test_what_somebody_put_into_the_folder_of_a_night_stays_there(nightly):
    nightly.run()
    (nightly.night() / "remarks").mkdir()
    (nightly.night() / "remarks" / "mine.txt").write_text("mine")
    nightly.settings(title="Another")
    nightly.run()
    assert (nightly.night() / "remarks" / "mine.txt").read_text() == "mine"


def test_a_folder_that_is_no_night_is_not_replaced(nightly, refusal):
    nightly.night().mkdir(parents=True)
    (nightly.night() / "horizons.csv").write_text("mine")
    result = nightly.run("-q", status=2)
    refusal(result, 2, "20310214T00", "a folder without night.json")
    assert (nightly.night() / "horizons.csv").read_text() == "mine"


def test_an_older_start_does_not_take_the_page_of_the_newest(nightly):
    nightly.run()
    page = (nightly.products / "briefing.html").read_bytes()
    nightly.run("--start", "2031-02-12T00")
    assert nightly.report()["start"] == "2031-02-12T00:00"
    assert nightly.night("20310212T00").is_dir()
    assert (nightly.products / "briefing.html").read_bytes() == page
    assert page != (nightly.night("20310212T00") / "briefing.html").read_bytes()


def test_what_is_usual_comes_from_the_nights_before(nightly):
    """The same night filed under twelve dates before it and two after it."""
    nightly.run()
    assert nightly.report()["limits"][0]["usual"]["nights"] == 0
    night = read_night_file(nightly.archive / "nights" / "20310214T00.nc")
    for days in (*range(-12, 0), 1, 2):
        other = replace(night, start=night.start + np.timedelta64(days, "D"))
        write_night_file(nightly.archive / "nights" / other.name, other, {})
    nightly.run()
    assert nightly.states() == {**KEPT, "brief": "done"}
    (limit,) = nightly.report()["limits"]
    assert limit["usual"]["nights"] == 12
    assert limit["usual"]["median"] == pytest.approx(limit["horizon"], rel=1e-6)
    assert limit["usual"]["percentile"] == 50.0
    assert limit["usual"]["standing"] == "usual"
    (nightly.archive / "nights" / "20310215T00.nc").unlink()
    nightly.run()
    assert nightly.states() == KEPT, "a night after it changes nothing"


@pytest.mark.parametrize("number", range(4))
def test_a_night_that_failed_at_a_stage_goes_on_there(nightly, monkeypatch, number):
    stages = [stage for stage in chain.STAGES if stage.name != "verify"]
    nightly.run()
    whole = contents(nightly.folder)
    shutil.rmtree(nightly.products)
    shutil.rmtree(nightly.archive)
    with monkeypatch.context() as patch:
        if number < len(stages):
            kind = type(stages[number])
            real = kind.run

            def fail(self, work, folder):
                real(self, work, folder)
                raise RuntimeError("a kill")

            patch.setattr(kind, "run", fail)
        else:
            patch.setattr(chain, "archived", lambda *_: (_ for _ in ()).throw(RuntimeError("!")))
        result = nightly.run(status=1)
        assert "a fault of ours" in result.stderr
        monkeypatch.setenv("SOURCE_DATE_EPOCH", str(int(MADE) + 3600))
    nightly.run()
    states = nightly.states()
    for place, stage in enumerate(stages):
        assert states[stage.name] == ("kept" if place < number else "done"), states
    after = contents(nightly.folder)
    if number == 0:
        return  # nothing was done, so that the time of making may be another
    assert {**after, "report.json": b""} == {**whole, "report.json": b""}


def test_state_and_report_are_json_for_programs(nightly):
    nightly.run()
    state = json.loads((nightly.night() / "night.json").read_text(encoding="utf-8"))
    assert state["schema"] == "ensemble-horizon night 1"
    assert state["made"] == "2030-03-17T17:46:40Z"
    assert set(state["stages"]) == {"survey", "estimate", "brief"}


def test_the_number_of_workers_changes_no_bit(nightly):
    """Blocks smaller than the grid, whose sums over regions are added up."""
    settings = read_settings(nightly.config)
    catalogue = open_input(settings).catalogue
    variable = resolve_variable(settings, catalogue, "t2")
    places, layout = resolve_places(settings, catalogue), layout_of(catalogue)
    source = variable.source(places, layout, int(np.prod(catalogue.grid.shape)), False)
    context, found = ReadingContext(catalogue, (source,)), []
    for workers in (1, 2, 3):
        with Engine(workers, context) as engine:
            found.append(read_start(engine, context, 0, 0, 4 * 8 * 8, lambda leads: None).summary)
    for other in found[1:]:
        assert np.array_equal(found[0].gram, other.gram)
        assert np.array_equal(found[0].region_sum, other.region_sum)
