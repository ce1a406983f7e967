"""The command ``brief``: page and sheet from products that stand there."""

from __future__ import annotations

import dataclasses
import re
import shutil
from datetime import UTC, datetime

import numpy as np
import pytest
from pypdf import PdfReader

from ensemble_horizon.errors import ProductError
from ensemble_horizon.night.archive import file_night
from ensemble_horizon.night.brief import assemble_briefing
from ensemble_horizon.products.nights import night_of
from ensemble_horizon.products.page import VersionsTable
from ensemble_horizon.products.stored import read_results
from ensemble_horizon.settings import read_settings

VARIABLES = "[variables.t2]\ncriteria = [{tolerance = 1.5}]"
MAPS = 'maps = "each"\nfigures = false'
ARCHIVE = '[night]\narchive = "archive"\n'
BOTH = ["briefing.html", "briefing.pdf"]


@pytest.fixture(scope="module")
def store(tmp_path_factory):
    """Where the night that was estimated first is kept for the other tests."""
    return tmp_path_factory.mktemp("store")


@pytest.fixture
def products(night, store):
    """A night with maps, estimated."""
    if any(store.iterdir()):
        shutil.copytree(store, night.folder, dirs_exist_ok=True)
    night.settings(VARIABLES, products=MAPS, more="[regions.north]\nsouth = 52")
    if not night.products.exists():
        night.write()
        assert night.estimate().exit_code == 0
        shutil.copytree(night.folder, store, dirs_exist_ok=True)
    return night


def brief(night, *options):
    return night.run("brief", night.config, *options)


def page(night):
    return (night.products / "briefing.html").read_text(encoding="utf-8")


def sheet(night):
    (only,) = PdfReader(night.products / "briefing.pdf").pages
    return " ".join(only.extract_text().split())


def files(folder):
    return {path.name: path.read_bytes() for path in folder.iterdir() if path.is_file()}


def test_page_and_sheet_beside_the_products(products):
    before = files(products.products)
    result = brief(products)
    assert result.exit_code == 0, result.stderr
    assert "briefing.html and briefing.pdf in" in result.stdout
    after = files(products.products)
    assert sorted(set(after) - set(before)) == BOTH
    assert {name: after[name] for name in before} == before
    (row,) = products.rows()
    limit = f"{float(row['horizon']):.0f} h"
    for words in (page(products), sheet(products)):
        assert limit in words and "north" in words and "6 members" in words
    assert "Start 2031-02-14 00:00 UTC" in sheet(products)
    # The time of making is that of the products, so a second run makes the same bytes.
    made = re.search(r"^(\S+)T(\d\d:\d\d):\d\dZ", products.curves().attrs["history"])
    assert f"made {made[1]} {made[2]} UTC" in sheet(products)
    assert brief(products, "--quiet").stdout == ""
    assert files(products.products) == after


def test_members_that_do_not_count(night):
    night.write()
    night.settings(VARIABLES, runs="members = 7")
    assert night.estimate().exit_code == 0
    result = brief(night)
    assert "Only 6 of 7 members are used" in result.stdout
    for words in (page(night), sheet(night)):
        assert "Only 6 of 7 members are used" in words


def test_without_products(night, refusal):
    night.write()
    night.settings()
    text = refusal(brief(night), 3, "horizons.nc", "no such file", "run `estimate`")
    assert "in a folder of" not in text
    assert night.written() == []


def test_products_of_another_kind(night, refusal):
    night.settings()
    night.products.mkdir()
    (night.products / "README.txt").write_text("Two versions compared by Ensemble Horizon\n")
    refusal(brief(night), 3, "in a folder of: Two versions compared by Ensemble Horizon")


def test_nights_of_the_chain(night, refusal):
    night.settings()
    (night.products / "20310214T00").mkdir(parents=True)
    (night.products / "20310214T00" / "night.json").write_text("{}")
    refusal(brief(night), 3, "nights of `nightly`, which have their briefings")


@pytest.mark.parametrize("size", [0, 100, 5000])
def test_products_cut_short(products, size, refusal):
    path = products.products / "horizons.nc"
    path.write_bytes(path.read_bytes()[:size])
    refusal(brief(products), 3, "horizons.nc")
    assert not (products.products / "briefing.html").exists()


def test_products_of_other_settings(products, refusal):
    text = products.config.read_text()
    products.config.write_text(text.replace("1.5", "2.5").replace("south = 52", "south = 50"))
    refusal(
        brief(products), 3, "products of others", "variables.t2.criteria", "regions.north.south"
    )
    assert not (products.products / "briefing.html").exists()


def archived(night, count, shift):
    """Put ``count`` nights before tonight into the archive, each limit ``shift`` hours later."""
    tonight = night_of(read_results(night.products))
    for number in range(1, count + 1):
        limits = [
            dataclasses.replace(limit, horizon=limit.horizon + shift) for limit in tonight.limits
        ]
        start = tonight.start - np.timedelta64(number, "D")
        file_night(night.folder / "archive", dataclasses.replace(
            tonight, start=start, limits=tuple(limits)), {"version": "0"})  # fmt: skip


@pytest.mark.slow
def test_what_is_usual_comes_from_the_archive(products):
    archived(products, 12, 20)
    broken = products.folder / "archive" / "nights" / "20310201T00.nc"
    broken.write_bytes(b"no night at all")
    # Settings that the numbers do not follow from may change after the estimate.
    text = products.config.read_text()
    products.config.write_text(f'title = "A new name"\n{text}\n{ARCHIVE}')
    result = brief(products)
    assert result.exit_code == 0, result.stderr
    assert "A new name" in page(products) and "A new name" in sheet(products)
    # Every past night was longer by 20 h.
    assert "shorter than usual" in page(products)
    assert "shorter than all 12 past nights" in page(products)
    (row,) = products.rows()
    usual = f"{float(row['horizon']) + 20:.0f}"
    assert f"{usual} ({usual} to {usual}) " in sheet(products)
    assert "shorter than all 12" in sheet(products)
    assert "set_aside" in result.stdout and "20310201T00.nc" in page(products)
    assert not broken.exists()


def test_versions_that_are_none(products, tmp_path, refusal):
    refusal(brief(products, "--versions", tmp_path / "nothing"), 3, "run `compare`")
    assert not (products.products / "briefing.html").exists()


def test_neither_file_without_the_other(products, monkeypatch, refusal):
    def full(path, briefing):
        raise ProductError(str(path), expected="room", found="a full disk", remedy="free some")

    monkeypatch.setattr("ensemble_horizon.products.sheet_pdf.write_sheet", full)
    before = products.written()
    refusal(brief(products), 2, "briefing.pdf", "a full disk")
    assert products.written() == before


def test_the_latest_of_several_starts(night, growing, write_member):
    for day in (14, 15):
        for number, field in enumerate(growing(members=5, seed=day)):
            path = night.folder / f"2031-02-{day}" / f"m{number:02d}.nc"
            write_member(path, {"t2": field}, start=f"2031-02-{day} 00:00")
    night.settings(VARIABLES, files="{start:%Y-%m-%d}/m{member:02d}.nc", products=MAPS)
    rows = night.estimated()
    assert [row["start"] for row in rows] == ["2031-02-14T00:00:00", "2031-02-15T00:00:00", "all"]
    assert brief(night).exit_code == 0
    words = sheet(night)
    assert "Start 2031-02-15 00:00 UTC" in words and "2031-02-14" not in words
    assert "all starts" not in words
    results = read_results(night.products)
    told = assemble_briefing(
        read_settings(night.config), results, made=np.datetime64("2031-02-15").item(),
        usual={}, troubles=(),
    )  # fmt: skip
    (only,) = told.results
    same = night.curves()["t2_horizon"].sel(start=night.curves()["start"][-1]).squeeze()
    assert float(only.curves["horizon"].squeeze()) == float(same)
    assert told.start == "2031-02-15T00:00:00"


def test_names_with_tags(night):
    night.write()
    night.settings(
        '[variables."<script>alert(1)</script>"]\nsource = "t2"\n'
        "criteria = [{name = \"<b>& 'lift'\", tolerance = 1.5}]",
        more='[regions."</title><img src=x>"]\nsouth = 52',
        products=MAPS,
    )
    assert night.estimate().exit_code == 0
    assert brief(night).exit_code == 0
    for tag in ("<script>alert", "<b>&", "<img src=x>"):
        assert tag not in page(night)
    assert "<script>alert(1)</script>" in sheet(night)


def test_a_grid_point_far_from_its_site_is_told(night):
    night.write()
    latitudes = np.asarray(night_grid(night)["latitude"])
    longitudes = np.asarray(night_grid(night)["longitude"])
    half = (latitudes[1] - latitudes[0]) / 2
    sites = (
        f"[sites.Near]\nlatitude = {latitudes[0]}\nlongitude = {longitudes[0]}\n"
        f"[sites.Far]\nlatitude = {latitudes[0] + half}\nlongitude = {longitudes[0]}\n"
    )
    night.settings(VARIABLES, products=MAPS, more=sites)
    assert night.estimate().exit_code == 0
    assert brief(night).exit_code == 0
    # Along a meridian a degree is 2 pi 6371 km / 360.
    distance = abs(half) * 2 * np.pi * 6371 / 360
    assert distance > 25
    found = re.findall(r"The grid point used for (\w+) lies (\d+) km away", page(night))
    assert [name for name, _ in found] == ["Far"]
    assert float(found[0][1]) == pytest.approx(distance, abs=1)
    assert "No past start is verified for this briefing" in page(night)


def night_grid(night):
    import xarray as xr

    with xr.open_dataset(sorted(night.folder.rglob("m00.nc"))[0]) as member:
        return {name: member[name].values for name in ("latitude", "longitude")}


@pytest.mark.parametrize(
    ("a", "b", "version"),
    [
        ("/old/1/m0.nc", "HERE/1/m0.nc", "new"),
        ("HERE/1/m0.nc", "/new/1/m0.nc", "old"),
        ("HERE/1/m0.nc", "HERE/2/m0.nc", ""),
        ("/old/m0.nc", "/new/m0.nc", ""),
        ("", "", ""),
    ],
)
def test_the_version_of_tonight_is_known_by_where_its_runs_lie(products, a, b, version):
    settings = read_settings(products.config)
    here = str(settings.run_files()).partition("{")[0].partition("*")[0].rpartition("/")[0]
    inputs = (a.replace("HERE", here), b.replace("HERE", here))
    told = assemble_briefing(
        settings, read_results(products.products), made=datetime(2031, 2, 14, tzinfo=UTC),
        usual={}, troubles=(), versions=VersionsTable("old", "new", "", (), inputs=inputs),
    )  # fmt: skip
    assert told.versions.tonight == version
