"""Whose archive and whose folder of products it is: two settings files never mix silently."""

from __future__ import annotations

import json
import shutil
from pathlib import Path

import pytest
from nightly_archive import MADE, Nightly, contents, light_briefing

from ensemble_horizon.errors import SettingsError
from ensemble_horizon.night.chain.owner import OWNER_FILE, require_own
from ensemble_horizon.settings import read_settings


@pytest.fixture
def nightly(tmp_path, monkeypatch) -> Nightly:
    monkeypatch.setenv("SOURCE_DATE_EPOCH", MADE)
    monkeypatch.setattr("ensemble_horizon.night.chain.closing.write_briefing", light_briefing)
    made = Nightly(tmp_path / "a")
    made.folder.mkdir()
    made.write(13, 14)
    made.settings()
    return made


def edit(nightly: Nightly, *changes: tuple[str, str]) -> None:
    text = nightly.config.read_text(encoding="utf-8")
    for old, new in changes:
        assert old in text
        text = text.replace(old, new)
    nightly.config.write_text(text, encoding="utf-8")


def owner(nightly: Nightly) -> dict:
    return json.loads((nightly.archive / OWNER_FILE).read_text(encoding="utf-8"))


def another(nightly: Nightly, archive: str = "../a/archive") -> Nightly:
    """A second settings file, of other runs, that names the archive of the first."""
    other = Nightly(nightly.folder.parent / "b")
    other.folder.mkdir()
    other.write(13, 14)
    other.settings(title="Other", night=f'archive = "{archive}"')
    return other


def test_the_archive_of_other_runs_is_refused(nightly, refusal):
    nightly.run()
    before = contents(nightly.archive)
    other = another(nightly)
    text = refusal(
        other.run("-q", status=2), 2, "night.archive", str(nightly.archive), "'Night'",
        str(nightly.folder / "{start:%Y%m%d%H}"), "--adopt-archive", "name another folder",
    )  # fmt: skip
    assert str(other.folder / "{start:%Y%m%d%H}") in text
    assert contents(nightly.archive) == before
    assert not other.night().exists()
    assert other.report()["error"]["kind"] == "SettingsError"
    nightly.run()  # and the owner goes on
    assert nightly.states()["archive"] == "kept"


def test_two_files_of_the_same_runs_and_other_nights_are_refused(nightly, refusal):
    nightly.run()
    before = contents(nightly.archive)
    edit(nightly, ('folder = "out"', 'folder = "elsewhere"'))
    refusal(nightly.run("-q", status=2), 2, "night.archive", f"here in {nightly.folder}/elsewhere")
    assert contents(nightly.archive) == before


def test_another_source_of_a_variable_is_refused_and_another_title_is_not(nightly, refusal):
    nightly.run()
    edit(nightly, ('title = "Night"', 'title = "New name"'))
    nightly.run()
    assert owner(nightly)["title"] == "New name"
    edit(nightly, ("[variables.t2]", '[variables.t2]\nsource = "tas"'))
    refusal(nightly.run("-q", status=2), 2, "night.archive", "t2 from t2, here from tas")


def test_a_variable_more_is_welcome_and_remembered(nightly):
    nightly.run()
    more = '[variables.warm]\nsource = "t2"\ncriteria = [{tolerance = 1}]'
    nightly.settings(more)
    nightly.run()
    nightly.settings()
    nightly.run()
    assert owner(nightly)["variables"] == {"t2": ["t2"], "warm": ["t2"]}


def test_a_tree_that_is_moved_as_a_whole_stays_its_own(nightly):
    nightly.run()
    moved = Nightly(nightly.folder.parent / "moved")
    shutil.move(nightly.folder, moved.folder)
    moved.run("--start", "2031-02-13")
    assert str(moved.folder) in owner(moved)["runs"][0]
    assert len(list((moved.archive / "nights").glob("*.nc"))) == 2


def test_an_archive_that_is_moved_alone_stays_its_own(nightly):
    nightly.run()
    nightly.archive.rename(nightly.folder / "shelf")
    edit(nightly, ('archive = "archive"', 'archive = "shelf"'))
    nightly.run("--start", "2031-02-13")
    assert len(list((nightly.folder / "shelf" / "nights").glob("*.nc"))) == 2


def test_where_the_runs_have_moved_the_archive_is_adopted_if_asked(nightly):
    nightly.run()
    (nightly.folder / "runs").mkdir()
    for day in (13, 14):
        (nightly.folder / f"203102{day}00").rename(nightly.folder / "runs" / f"203102{day}00")
    edit(nightly, ('files = "{start', 'files = "runs/{start'))
    nightly.run(status=2)
    result = nightly.run("--adopt-archive", "--start", "2031-02-13")
    assert "was taken over" in result.stderr
    assert any("was taken over" in note for note in nightly.report()["notes"])
    assert len(list((nightly.archive / "nights").glob("*.nc"))) == 2
    nightly.run()
    assert not [note for note in nightly.report()["notes"] if "taken over" in note]


def test_a_template_that_was_misspelt_claims_nothing(nightly):
    edit(nightly, ("m{member:02d}.nc", "n{member:02d}.nc"))
    nightly.run(status=3)
    assert not (nightly.archive / OWNER_FILE).exists()
    edit(nightly, ("n{member:02d}.nc", "m{member:02d}.nc"))
    nightly.run()


def test_an_archive_in_which_nothing_is_filed_is_nobodys(nightly):
    other = another(nightly, "../a/archive")
    other.run()
    shutil.rmtree(nightly.archive / "nights")
    nightly.run()
    assert owner(nightly)["title"] == "Night"


def test_an_archive_without_a_record_or_with_a_broken_one_goes_on(nightly):
    nightly.run()
    record = nightly.archive / OWNER_FILE
    whole = record.read_bytes()
    record.write_bytes(whole.replace(b"Night", b"Right"))
    result = nightly.run()
    (note,) = nightly.report()["notes"]
    assert "owner.json was broken and is now" in note
    assert note in result.stderr
    assert (nightly.archive / "set_aside" / OWNER_FILE).is_file()
    assert record.read_bytes() == whole
    record.unlink()
    nightly.run()
    assert record.read_bytes() == whole


def test_brief_does_not_tell_what_is_usual_by_the_nights_of_others(nightly, refusal):
    nightly.run()
    own = nightly.settings().with_name("brief.toml")
    own.write_text(nightly.config.read_text().replace('folder = "out"', 'folder = "estimated"'))
    require_own(read_settings(own), nightly.archive, products=False)  # other products do not matter
    other = another(nightly)
    with pytest.raises(SettingsError, match=r"night\.archive.*'Night'"):
        require_own(read_settings(other.config), nightly.archive, products=False)


def run_command(nightly: Nightly, *arguments: object):
    from click.testing import CliRunner

    from ensemble_horizon.cli.main import group

    return CliRunner().invoke(group, [str(item) for item in arguments])


def test_nights_do_not_go_where_an_estimate_stands(nightly, refusal):
    assert run_command(nightly, "estimate", nightly.config).exit_code == 0
    before = contents(nightly.products)
    refusal(nightly.run("-q", status=2), 2, str(nightly.products), "products of `estimate`")
    assert contents(nightly.products) == before


@pytest.mark.parametrize("command, status", [("estimate", 2), ("brief", 3)])
def test_an_estimate_does_not_go_where_nights_stand(nightly, refusal, command, status):
    nightly.run()
    before = contents(nightly.products)
    result = run_command(nightly, command, nightly.config, "-q")
    refusal(result, status, str(nightly.products), "nights", "`nightly`", "`estimate`")
    assert contents(nightly.products) == before


@pytest.mark.parametrize("archive", ["out", "out/archive", ".", "x/../out/"])
def test_archive_and_products_stand_beside_one_another(nightly, refusal, archive):
    nightly.settings(night=f'archive = "{archive}"')
    refusal(nightly.run("-q", status=2), 2, "night.archive", "products.folder")
    assert not nightly.products.exists()


@pytest.mark.parametrize("key, name", [("night.archive", "archive"), ("products.folder", "out")])
@pytest.mark.parametrize("below", ["", "/deeper/still"])
def test_a_file_in_the_way_is_told_by_its_key(nightly, refusal, key, name, below):
    edit(nightly, (f'"{name}"', f'"{name}{below}"'))
    (nightly.folder / name).write_text("a file")
    text = refusal(nightly.run("-q", status=2), 2, f"the file {nightly.folder / name}")
    assert text.startswith(f"ensemble-horizon: {key}: ")
    assert ".lock" not in text
    assert (nightly.folder / name).read_text() == "a file"
    assert Path(nightly.folder / name).is_file()
