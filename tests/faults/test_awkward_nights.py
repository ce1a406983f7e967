"""Variables, places and criteria of names that break things, through the whole chain."""

from __future__ import annotations

import csv
import json
from html.parser import HTMLParser
from pathlib import Path

import netCDF4
import pytest
from small_night import SmallNight, faults_of, hidden_in

AWKWARD = {
    "slash": "../../etc/t2 / K",
    "quotes": 'it\'s "warm", really; `so`',
    "script": "<script>alert('t2')</script><img src=x onerror=alert(1)>",
    "template": "{{ 7 * 7 }} {% raw %} ${x} %s {0}",
    "formula": "=cmd|' /C calc'!A0",
    "emoji": "🌪️ vânt \u202ereversed",
    "spaces": "  two  spaces ",
    "dots": "..",
    "long": "long " * 60,
    "dash": "-rf",
}


class Page(HTMLParser):
    """What a browser makes of a page: elements, their attributes, and the text."""

    def __init__(self, text: str) -> None:
        super().__init__()
        self.elements: list[tuple[str, dict[str, str | None]]] = []
        self.words: list[str] = []
        self.blocks: list[str] = []  # of data for scripts
        self.feed(text)
        self.close()

    def handle_starttag(self, tag, attributes):
        self.elements.append((tag, dict(attributes)))

    def handle_data(self, data):
        if self.cdata_elem is None:
            self.words.append(data)
        elif self.elements[-1] == ("script", {**self.elements[-1][1], "type": "application/json"}):
            self.blocks.append(data)


def quoted(name: str) -> str:
    return json.dumps(name, ensure_ascii=False)


def settings(night: SmallNight, variables: list[str], region: str, criterion: str) -> None:
    tables = "\n".join(
        f'[variables.{quoted(name)}]\nsource = "t2"\n'
        f"criteria = [{{name = {quoted(criterion)}, tolerance = 1.5}}]"
        for name in variables
    )
    places = (
        f"[regions.{quoted(region)}]\nsouth = 35\n"
        f"[sites.{quoted(region + ' site')}]\nlatitude = 40\nlongitude = 10"
    )
    night.settings(
        tables, more=places,
        products='folder = "out"\nmaps = "each"\nfigures = true\nmap_intervals = false',
    )  # fmt: skip


def rows_of(path: Path) -> list[dict[str, str]]:
    with path.open(newline="", encoding="utf-8") as file:
        return list(csv.DictReader(file, strict=True))


@pytest.fixture
def awkward(tmp_path, forking) -> SmallNight:
    """A night all of whose variables have awkward names, and so have places and criteria."""
    night = SmallNight(tmp_path / "night [1] 'of' $x é").write()
    settings(night, list(AWKWARD.values()), AWKWARD["script"], AWKWARD["quotes"])
    forking.done(night, "-q")
    return night


@pytest.mark.slow
def test_names_that_break_things(awkward, forking):
    night = awkward
    assert set(night.states().values()) == {"done"}
    assert faults_of(night.night()) == []
    assert hidden_in(night.products, night.archive) == []
    outside = {path.name for path in night.folder.iterdir()}
    assert outside == {
        "20310211", "20310212", "20310213", "20310214", "analyses.nc", "night.toml", "out",
        "archive", "report.json", "log.txt",
    }  # fmt: skip
    names = [path.name for path in night.night().rglob("*")]
    assert all(len(name.encode()) <= 255 for name in names)
    assert all(name.isprintable() and not set(name) & set("<>\"'\\:*?|") for name in names), names
    figures = list((night.night() / "figures").glob("*.png"))
    assert len(figures) >= 2 * len(AWKWARD)

    # CSV: rows and names come back as they were given.
    places = [AWKWARD["script"], AWKWARD["script"] + " site"]
    rows = rows_of(night.night() / "horizons.csv")
    told = [(row["variable"], row["place"], row["criterion"]) for row in rows]
    assert told == [(v, p, AWKWARD["quotes"]) for v in AWKWARD.values() for p in places]
    assert {row["variable"] for row in rows_of(night.night() / "scores.csv")} == set(
        AWKWARD.values()
    )

    # The report, the state and the archive.
    limits = night.report()["limits"]
    assert [(n["variable"], n["place"], n["criterion"]) for n in limits] == told
    with netCDF4.Dataset(night.archive / "nights" / "20310214T00.nc") as file:
        found = zip(*(file[name][:] for name in ("variable", "place", "criterion")), strict=True)
        assert list(found) == told

    # The page: nothing that was given became an element, an attribute or a template.
    text = (night.products / "briefing.html").read_text(encoding="utf-8")
    page = Page(text)
    scripts = [attributes for tag, attributes in page.elements if tag == "script"]
    assert all("src" not in attributes for attributes in scripts)
    assert len([a for a in scripts if a.get("type") != "application/json"]) == 1, "our own"
    assert page.blocks
    for block in page.blocks:
        json.loads(block)
    assert not [a for _, a in page.elements if any(key.startswith("on") for key in a)]
    assert not [a for tag, a in page.elements if tag == "img" and a.get("src") == "x"]
    words = " ".join(" ".join(page.words).split())
    for name in AWKWARD.values():
        assert " ".join(name.split())[:60] in words, name

    # The next run finds all as it was.
    forking.done(night, "-q")
    assert set(night.states().values()) == {"kept"}


@pytest.mark.slow
@pytest.mark.parametrize(
    "name", ["two\nlines", "bell \a", "tab\tbed", "nul\0", "n\0l", "\x1b[31mred"]
)
def test_names_with_control_characters(tmp_path, forking, name):
    """Refused with the key of the settings, or carried through unharmed; never a fault of ours."""
    night = SmallNight(tmp_path).write((13, 14))
    name_in_toml = json.dumps(name)
    night.settings(
        f'[variables.{name_in_toml}]\nsource = "t2"\ncriteria = [{{tolerance = 1.5}}]',
        more=f"[regions.{name_in_toml}]\nsouth = 35",
    )
    status, _ = forking.run(night, "-q")
    log = night.log()
    assert "Traceback" not in log
    assert "a fault of ours" not in log
    if status == 0:
        (row,) = rows_of(night.night() / "horizons.csv")
        assert (row["variable"], row["place"]) == (name, name)
        assert night.report()["limits"][0]["variable"] == name
        assert faults_of(night.night()) == []
    else:
        assert status == 2
        assert "variables" in log
        assert not night.night().exists()
    assert "\x1b" not in log
    assert "\a" not in log
