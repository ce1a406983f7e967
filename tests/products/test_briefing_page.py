"""The briefing page: structure, policy, escaping, words, embedded values, contrast, equal bytes."""

from __future__ import annotations

import base64
import hashlib
import json
import re
import subprocess
import sys
from dataclasses import dataclass, field, replace
from datetime import datetime
from html.parser import HTMLParser
from itertools import pairwise

import numpy as np
import pytest
import xarray as xr
from synthetic_products import GRIDS, Result, make_curves, make_maps, regular

from ensemble_horizon.errors import ArgumentError, InputError
from ensemble_horizon.horizon.usual import NightHorizon, Standing, Usual, usual_of
from ensemble_horizon.products import write_versions
from ensemble_horizon.products.map_legend import STATUS_WORDS
from ensemble_horizon.products.maps import map_content
from ensemble_horizon.products.page import Briefing, read_versions, write_page
from ensemble_horizon.products.page.clock import Clock, clock_of
from ensemble_horizon.products.page.curve_plot import LEFT, RIGHT, curve_plot
from ensemble_horizon.products.page.lanes import lane_chart
from ensemble_horizon.products.page.map_figure import map_part
from ensemble_horizon.products.page.policy import embedded_json
from ensemble_horizon.products.page.readings import map_reading, raster_of
from ensemble_horizon.products.page.rendering import packaged, page_text
from ensemble_horizon.products.page.standing import rank_words, standing_words, usual_words
from ensemble_horizon.products.places import Ground, PlaceMark
from ensemble_horizon.products.score_sentences import PastSkill
from ensemble_horizon.products.view import map_view
from ensemble_horizon.vocabulary import CAUTION, Status

NAN, INF = float("nan"), float("inf")
VOID = {"meta", "link", "img", "input", "br", "hr"}
AWKWARD = "Bank</script><script>alert(\"1\")</script> & 'sons' <img src=x onerror=alert(2)>"
LONG = "Donauversorgungsschifffahrtsgesellschaft" * 3
PLACES = (AWKWARD, LONG, "Strait/inner [B]", "{{ shelf }} {% raw %}", "Quiet bay")
CRITERIA = ("gale/<b>spread</b>", "sat 0.7")


@dataclass
class Element:
    """An element of the page: its attributes, and all text inside it."""

    tag: str
    attributes: dict[str, str | None]
    text: str = ""


@dataclass
class Page(HTMLParser):
    """The page as a parser of HTML sees it; raises where tags do not close as they opened."""

    source: str
    elements: list[Element] = field(default_factory=list)

    def __post_init__(self):
        super().__init__(convert_charrefs=True)
        self._open: list[Element] = []
        self.feed(self.source)
        self.close()
        assert self._open == []

    def handle_starttag(self, tag, attributes):
        assert len({name for name, _ in attributes}) == len(attributes), tag
        element = Element(tag, dict(attributes))
        self.elements.append(element)
        if tag not in VOID:
            self._open.append(element)

    def handle_startendtag(self, tag, attributes):
        self.elements.append(Element(tag, dict(attributes)))

    def handle_endtag(self, tag):
        assert self._open.pop().tag == tag

    def handle_data(self, data):
        for element in self._open:
            element.text += data

    def all(self, *tags, **attributes):
        wanted = {name.rstrip("_").replace("_", "-"): value for name, value in attributes.items()}
        return [
            element
            for element in self.elements
            if (not tags or element.tag in tags)
            and all(element.attributes.get(name) == value for name, value in wanted.items())
        ]

    def one(self, *tags, **attributes):
        (found,) = self.all(*tags, **attributes)
        return found


def usual(standing=Standing.usual, **changes):
    values = {"nights": 30, "median": 96.0, "low": 72.0, "high": 120.0, "percentile": 47.0}
    return Usual(**{**values, **changes}, standing=standing)


def past_skill(place, **changes):
    values = {
        "variable": "wind/<speed>", "long_name": "wind <i>speed</i>", "against": "analysis",
        "starts": 13, "lead": "120 h", "ratio": "0.85 (0.77 to 0.94)", "parting": "too little",
        "score": "skill over climatology", "end": "210 h (155 to beyond the run)",
        "until": "132 h",
    }  # fmt: skip
    return PastSkill(**{**values, **changes}, place=place)


def plain_results():
    return [Result(make_curves(places=("Bank",)))]


def make_briefing(results=None, **changes):
    if results is None:
        names = {"variable": "wind/<speed>", "long_name": "wind <i>speed</i>", "criteria": CRITERIA}
        curves = make_curves(places=PLACES, chance=True, **names)
        results = (
            Result(curves, make_maps(GRIDS["tiny"](), **names)),
            Result(make_curves(variable="pressure", long_name="pressure", units="Pa")),
        )
    values = {
        "title": "Desk </title><script>alert(3)</script>",
        "start": "2031-01-05T00:00:00",
        "made": datetime(2031, 1, 5, 5, 30),
        "results": tuple(results),
        "members": "19 of 20 members",
        "ground": Ground(
            (PlaceMark.box(AWKWARD, 3, 5, 51, 53), PlaceMark.site(LONG, 7.5, 52.0)), True
        ),
        "troubles": ("Member 7 <is> missing.",),
        "skill": (past_skill("Bank <i>"),),
        "notes": ("A note with <tags>.",),
        "version": "0.1.0",
    }
    return Briefing(**{**values, **changes})


@pytest.fixture(scope="module")
def source():
    return page_text(make_briefing())


@pytest.fixture(scope="module")
def page(source):
    return Page(source)


def test_the_headings_are_an_outline(page):
    levels = [int(element.tag[1]) for element in page.all("h1", "h2", "h3", "h4", "h5", "h6")]
    assert levels[0] == 1
    assert levels.count(1) == 1
    assert max(levels) <= 3
    assert all(after <= before + 1 for before, after in pairwise(levels))
    headings = [element.text for element in page.all("h2")]
    assert headings == [
        "What matters first",
        "The input",
        "All limits",
        "Maps",
        "How fast the members part",
        "Past skill",
        "Notes",
        "Cautions",
    ]


def test_landmarks_language_skip_link_and_ids(page):
    assert page.one("html").attributes["lang"] == "en"
    assert "width=device-width" in page.one("meta", name="viewport").attributes["content"]
    for tag in ("main", "header", "footer"):
        assert page.one(tag)
    assert page.one("nav").attributes["aria-label"]
    ids = [element.attributes["id"] for element in page.elements if "id" in element.attributes]
    assert len(ids) == len(set(ids))
    skip = page.all("a")[0].attributes
    assert skip["class"] == "skip"
    targets = [element.attributes["href"] for element in page.all("a", "use")]
    assert {target.removeprefix("#") for target in targets} <= set(ids)
    for name in ("aria-labelledby", "aria-describedby"):
        for element in page.elements:
            assert set((element.attributes.get(name) or "").split()) <= set(ids)


def test_the_policy_allows_this_style_and_this_script_and_nothing_else(page):
    policy = page.one("meta", http_equiv="Content-Security-Policy").attributes["content"]
    rules = dict(rule.split(" ", 1) for rule in policy.split("; "))
    style = page.one("style").text
    (script,) = [one.text for one in page.all("script") if "type" not in one.attributes]

    def digest(text):
        # CSP level 2, section 4.2.5: base64 of the SHA-256 of the text between the tags.
        return base64.b64encode(hashlib.sha256(text.encode()).digest()).decode()

    assert rules == {
        "default-src": "'none'",
        "img-src": "data:",
        "style-src": f"'sha256-{digest(style)}'",
        "script-src": f"'sha256-{digest(script)}'",
        "base-uri": "'none'",
        "form-action": "'none'",
    }
    for element in page.elements:
        assert "style" not in element.attributes, element
        assert not [name for name in element.attributes if name.startswith("on")], element


def test_nothing_outside_the_page_is_asked_for(page):
    for element in page.elements:
        for name in ("src", "href", "xlink:href", "srcset", "action", "data", "poster"):
            address = element.attributes.get(name)
            assert address is None or address.startswith(("data:", "#")), (element.tag, address)
        for value in element.attributes.values():
            assert "url(" not in (value or "").replace("url(#", "")
    assert page.all("iframe", "object", "embed", "form", "base") == []
    assert "@import" not in packaged("page.css")
    assert "url(" not in packaged("page.css")
    for word in ("fetch(", "XMLHttpRequest", "innerHTML", "eval(", "import("):
        assert word not in packaged("page.js")


def test_names_and_sentences_stay_text(source, page):
    figures = len(page.all("figure", class_="map"))
    grids, code = 1, 1
    assert len(page.all("script")) == figures + grids + code
    assert page.all("i") == []
    assert "alert(" not in "".join(element.text for element in page.all("script"))
    assert page.one("h1").text == "Desk </title><script>alert(3)</script>"
    assert page.all("title")[0].text.startswith("Desk </title><script>alert(3)</script>: ")
    rows = [element.text for element in page.all("th", scope="rowgroup")]
    for place in PLACES:
        assert any(row.startswith(place) for row in rows)
    assert any("Member 7 <is> missing." in element.text for element in page.all("li"))
    assert any("A note with <tags>." in element.text for element in page.all("li"))
    figure = page.all("figure", class_="map")[0].attributes
    assert (figure["data-variable"], figure["data-criterion"]) == ("wind/<speed>", CRITERIA[0])
    # A page must not end early, wherever a name stands.
    assert source.count("</html>") == source.count("</body>") == 1


def test_data_inside_the_page_cannot_end_their_element():
    data = {"name": "</script><!-- <script> ]]> & \u2028", "lead": 1.5}
    told = embedded_json(data)
    assert not set("<>&\u2028") & set(told)
    assert json.loads(told) == data
    with pytest.raises(ValueError, match="JSON compliant"):
        embedded_json({"lead": NAN})


def test_every_figure_has_words(page):
    for image in page.all("img"):
        assert "alt" in image.attributes
    maps = [image for image in page.all("img") if image.attributes["alt"]]
    assert len(maps) == len(page.all("figure", class_="map")) == 2
    for drawing in page.all("svg", role="img"):
        titles = drawing.attributes["aria-labelledby"].split()
        words = [page.one(id=title).text for title in titles]
        assert all(words)
    described = [element.text for element in page.all("desc")]
    assert len(described) == len(page.all("figure", class_="curve")) == 10
    assert all("Limits: " in words for words in described)
    bare = [svg for svg in page.all("svg") if not {"role", "aria-hidden"} & set(svg.attributes)]
    assert all("overflow" in svg.attributes for svg in bare)  # parts of a drawing with a title


def test_tables_have_captions_and_scopes(page):
    tables = page.all("table")
    assert len(tables) == len(page.all("caption")) == 3
    assert all("scope" in heading.attributes for heading in page.all("th"))
    assert {heading.attributes["scope"] for heading in page.all("th")} == {
        "col",
        "row",
        "rowgroup",
    }
    for box in page.all("div", class_="table-box"):
        assert box.attributes["tabindex"] == "0"
        assert box.attributes["aria-labelledby"]
    assert len(page.all("tr")) == 2 + 5 * 3 + 5 * 2 + 2


def test_head_facts_troubles_and_caution(page):
    facts = {name: page.one("dd", id=f"fact-{name}").text for name in ("start", "members", "made")}
    assert facts == {
        "start": "Sun 5 Jan 2031, 00:00 UTC",
        "members": "19 of 20 members",
        "made": "Sun 5 Jan 2031, 05:30 UTC",
    }
    assert page.one("dd", id="fact-input").text == "1 trouble in the input"
    assert page.one("p", class_="caution").text == CAUTION
    assert page.one("div", class_="troubles")
    calm = Page(page_text(make_briefing(plain_results(), troubles=())))
    assert calm.all("div", class_="troubles") == []
    assert "Nothing wrong was found in the input" in calm.one("section", id="input").text
    assert calm.one("dd", id="fact-input").text == "nothing wrong found"
    unseen = Page(page_text(make_briefing(plain_results(), troubles=(), surveyed=False)))
    assert "not looked at" in unseen.one("section", id="input").text
    assert unseen.one("dd", id="fact-input").text == "not looked at"


def test_equal_briefings_give_equal_bytes(source, tmp_path):
    path = write_page(tmp_path / "night" / "briefing.html", make_briefing())
    assert path.read_bytes() == source.encode()
    assert [item.name for item in path.parent.iterdir()] == ["briefing.html"]


def test_a_name_that_is_no_text_does_not_cost_the_page(tmp_path):
    path = write_page(tmp_path / "b.html", make_briefing(plain_results(), title="Desk \udcff 7"))
    assert "<h1>Desk ? 7</h1>" in path.read_text(encoding="utf-8")


def test_a_briefing_is_of_one_start():
    curves = make_curves(starts=("2031-01-05T00", "2031-01-06T00"))
    with pytest.raises(ArgumentError, match="one start each; found starts per variable: \\[2\\]"):
        make_briefing([Result(curves)])
    with pytest.raises(ArgumentError, match="no variable"):
        make_briefing([])


def test_two_variables_of_one_long_name_are_told_apart():
    results = [Result(make_curves(variable=name, places=("Bank",))) for name in ("low", "high")]
    headings = [item.text for item in Page(page_text(make_briefing(results))).all("h3")]
    assert headings[:2] == ["10 m wind speed (low)", "10 m wind speed (high)"]


def test_the_shortest_limit_comes_first_and_bars_lie_on_the_axis():
    briefing = make_briefing([Result(make_curves())])
    known = {("wind_speed", "North bank", "gale/spread"): usual(Standing.longer, high=INF)}
    briefing = make_briefing(briefing.results, usual=known)
    chart = lane_chart(briefing, Clock(datetime(2031, 1, 5), "hours"))
    assert chart.lanes[0].end == "start"
    reached = [limit for limit in briefing.limits() if limit.status == Status.reached]
    ordered = sorted(reached, key=lambda limit: limit.horizon)
    lanes = [lane for lane in chart.lanes if lane.end == "limit"]
    assert [lane.place for lane in lanes] == [limit.place for limit in ordered]
    for lane, limit in zip(lanes, ordered, strict=True):
        assert lane.mark == pytest.approx(limit.horizon / 2.4, abs=1e-3)
        assert lane.whole.x == 0
        assert lane.whole.width == pytest.approx(limit.low / 2.4, abs=1e-3)
        end = min(limit.high, 240.0)
        assert lane.doubtful.x + lane.doubtful.width == pytest.approx(end / 2.4, abs=2e-3)
    first = lanes[0]
    assert (first.usual_box.x, first.usual_box.width) == (30.0, 70.0)
    assert (first.usual_mark, first.usual_open) == (40.0, True)
    assert (first.standing, first.standing_words) == ("longer", "longer than usual")
    beyond = next(lane for lane in chart.lanes if lane.end == "beyond")
    assert (beyond.mark, beyond.value) == (100.0, "> 240 h")
    assert "projects" not in beyond.words
    assert "2 further limits of 10 not shown here" in chart.rest


def test_what_the_headline_says():
    curves = make_curves(places=("Bank",), criteria=("gale",))
    clock = clock_of(curves, "hours")

    def head(curves, known=()):
        return lane_chart(make_briefing([Result(curves)], usual=dict(known)), clock)

    curves["horizon"][:], curves["low"][:], curves["high"][:] = 89.0, 85.0, 95.0
    chart = head(curves, {("wind_speed", "Bank", "gale"): usual(Standing.shorter, percentile=4.0)})
    assert chart.headline == "First to go: gale (2.5 m s-1), 10 m wind speed, Bank."
    assert chart.detail == (
        "The forecast holds for 89 h (85 to 95), until Wed 8 Jan 17:00 UTC. That is shorter than "
        "usual (shorter than about 29 of 30 past nights)."
    )
    beyond = curves.assign(status=curves["status"] * 0 + int(Status.beyond_run))
    assert "No limit is reached within the run (240 h)" in head(beyond).headline
    nothing = curves.assign(status=curves["status"] * 0 + int(Status.no_data))
    assert "No limit can be stated" in head(nothing).headline
    assert head(nothing).lanes == ()
    assert "No limit can be stated" in page_text(make_briefing([Result(nothing)]))
    nowhere = curves.isel(place=slice(0, 0))
    assert "name no region, site or criterion" in page_text(make_briefing([Result(nowhere)]))


def test_words_of_what_is_usual():
    assert usual_words(usual(), "hours") == "96 h (72 to 120)"
    open_ended = usual(median=INF, high=INF)
    assert usual_words(open_ended, "hours") == "beyond the run (72 to beyond the run)"
    assert usual_words(Usual.unknown(3), "hours") == "–"
    assert usual_words(None, "hours") == "–"
    season = usual(season=True, percentile=NAN, percentile_bounds=(80.0, 100.0))
    assert rank_words(season) == "longer than at least 24 of 30 past nights of this time of year"
    assert rank_words(season, short=True) == "longer than at least 24 of 30 past nights"
    assert rank_words(Usual.unknown(3)) == ""
    assert rank_words(usual(percentile=NAN, percentile_bounds=(20.0, 80.0))) == ""


@pytest.mark.parametrize(
    ("past", "tonight", "words"),
    [
        # Counted by hand among 24, 36, ... 156 h.
        (range(24, 168, 12), 20.0, "shorter than all 12 past nights"),
        (range(24, 168, 12), 30.0, "shorter than 11 of 12 past nights"),
        (range(24, 168, 12), 36.0, "shorter than 10 of 12 past nights"),  # a tie counts for none
        (range(24, 168, 12), 150.0, "longer than 11 of 12 past nights"),
        (range(24, 168, 12), 200.0, "longer than all 12 past nights"),
    ],
)
def test_tonight_is_counted_among_the_past_nights(past, tonight, words):
    horizon = np.array(past, dtype=float)
    flags = np.full(horizon.size, int(Status.reached))
    night = NightHorizon(tonight, int(Status.reached), 240.0)
    found = usual_of(horizon, flags, np.full(horizon.size, 240.0), first_lead=0.0, tonight=night)
    assert rank_words(found) == words


def test_words_at_the_edge_of_the_usual_and_where_it_is_not_known():
    limit = make_briefing([Result(make_curves(places=("Bank",)))]).limits()[0]

    def told(horizon, low, high, known):
        return standing_words(known, replace(limit, horizon=horizon, low=low, high=high))

    short = usual(Standing.shorter, low=131.2)
    assert told(131.18, 105.0, 182.0, short) == "about the edge of the usual"
    assert told(129.0, 105.0, 182.0, short) == "shorter than usual, within its interval"
    assert told(129.0, 105.0, 130.0, short) == "shorter than usual"
    assert told(129.0, NAN, NAN, short) == "shorter than usual"
    far = usual(Standing.longer, high=120.0)
    assert told(129.0, 119.0, INF, far) == "longer than usual, within its interval"
    assert told(129.0, 100.0, 140.0, usual()) == "as usual"
    assert told(129.0, 1.0, 2.0, Usual.unknown(5)) == "usual not known: 5 of the 10 nights needed"
    assert standing_words(None, limit) == "usual not known"


def test_no_time_of_day_in_calendars_that_the_wall_does_not_know():
    curves = make_curves()
    assert clock_of(curves, "hours").at(36.0) == "Mon 6 Jan 12:00 UTC"
    assert clock_of(curves, "days").at(1.5) == "Mon 6 Jan 12:00 UTC"
    assert clock_of(curves, "1").at(1.5) == ""
    cftime = pytest.importorskip("cftime")
    other = curves.assign_coords(start=[cftime.Datetime360Day(2031, 2, 30)])
    assert clock_of(other, "hours").at(36.0) == ""
    assert [tick.day for tick in clock_of(other, "hours").ticks(240.0)] == [""] * 11


def decoded(packed, kind):
    return np.frombuffer(base64.b64decode(packed), dtype=kind)


def test_what_a_map_reads_out_are_the_values_of_the_file(page):
    grid_of_page = make_maps(
        GRIDS["tiny"](), variable="w", long_name="wind <i>speed</i>", criteria=CRITERIA
    )
    for number, figure in enumerate(page.all("figure", class_="map")):
        reading = json.loads(page.one(id=figure.attributes["data-reading"]).text)
        grid = json.loads(page.one(id=figure.attributes["data-grid"]).text)
        assert (grid["columns"], grid["rows"]) == (7, 5)
        x, y = decoded(grid["x"], "<f4"), decoded(grid["y"], "<f4")
        one = grid_of_page.isel(start=0, criterion=number)
        cells = decoded(grid["cells"], "<u2").reshape(5, 7)
        north_up = one.sortby("latitude", ascending=False)
        np.testing.assert_allclose(y[cells], np.repeat(north_up.latitude.values[:, None], 7, 1))
        np.testing.assert_allclose(x[cells], np.repeat(north_up.longitude.values[None], 5, 0))
        status = decoded(reading["status"], "u1")[cells]
        np.testing.assert_array_equal(status, north_up["status"].values)
        reached = status == Status.reached
        for name, field_name in (("limit", "horizon"), ("low", "low"), ("high", "high")):
            steps = decoded(reading[name], "<u2")[cells].astype(float)
            values = np.where(steps == 65535, np.nan, steps * reading["step"])
            values[steps == 65534] = np.inf
            true = north_up[field_name].values
            wanted = np.where(reached, true, np.nan) if name == "limit" else true
            # Within half a step of a 60000th of the run.
            np.testing.assert_allclose(values, wanted, atol=240 / 60000 / 2 + 1e-4)
        assert reading["words"][Status.beyond_run] == "beyond the run (> 240 h)"


def test_readings_are_those_of_true_grid_points(grid):
    maps = make_maps(grid).isel(start=0, criterion=0)
    view = map_view(maps["horizon"])
    raster = raster_of(view)
    assert raster.cells.shape == (raster.rows, raster.columns)
    assert raster.columns <= 240
    assert raster.rows <= 120
    assert raster.points.size < 65534
    assert raster.thinned == (raster.points.size < maps["horizon"].size)
    reading = map_reading(map_content(maps), raster, 240.0)
    status = decoded(reading["status"], "u1")
    np.testing.assert_array_equal(status, maps["status"].values.ravel()[raster.points])
    # Against a search of all points on the sphere (haversine), at some cells.
    columns, rows = view.pixels(raster.columns, raster.rows)
    rng = np.random.default_rng(1)
    lat, lon = np.deg2rad(view.y.ravel()), np.deg2rad(view.x.ravel())
    spacing = np.deg2rad(max((view.east - view.west) / raster.columns, 0.3))
    drawn = rng.integers((raster.rows, raster.columns), size=(40, 2))
    for row, column in drawn:
        cell = raster.cells[row, column]
        if cell < 0:
            continue
        here, there = np.deg2rad(rows[row]), np.deg2rad(columns[column])
        distance = 2 * np.arcsin(np.sqrt(
            np.sin((lat - here) / 2) ** 2
            + np.cos(lat) * np.cos(here) * np.sin((lon - there) / 2) ** 2
        ))  # fmt: skip
        if abs(rows[row]) < 85:
            assert distance[raster.points[cell]] <= distance.min() + 0.05 * spacing


def test_a_map_in_words():
    dims, coords, latitude, _ = regular(np.linspace(-88, 88, 45), np.arange(0.0, 360.0, 4.0))
    horizon = np.where(latitude < -30, 48.0, 96.0)
    horizon[:, 0] = np.where(latitude[:, 0] == latitude[30, 0], 12.0, horizon[:, 0])
    status = np.where(latitude > 30, int(Status.beyond_run), int(Status.reached)).astype(np.int8)
    status[30, 0] = Status.reached
    maps = xr.Dataset(
        {
            "horizon": (("start", "criterion", *dims), horizon[None, None]),
            "status": (("start", "criterion", *dims), status[None, None]),
        },
        coords={"start": ["2031"], "criterion": ["gale"], **coords},
        attrs={"variable": "w", "long_name": "wind", "lead_units": "hours", "last_lead": 120.0},
    )
    curves = make_curves(variable="w", long_name="wind")
    (figure,) = map_part((Result(curves, maps),), Ground(())).figures
    # North of 30 degrees lies a quarter of the sphere, south of 30 S another, with 48 h; the half
    # between them has 96 h. By number of points the lower limit would be as frequent.
    assert "beyond the run (> 120 h): 25 %" in figure.words
    assert "limit within the run: 75 %" in figure.words
    assert "Median of the limit by area: 96 h" in figure.words
    assert "Shortest: 12 h, at 32.00°N 0.00°E" in figure.words


@pytest.mark.parametrize(("dims", "shape"), [(("x",), (40,)), (("y", "x"), (5, 9))])
def test_maps_without_geography_and_without_a_number(dims, shape):
    field_of_limits = np.full((1, 1, *shape), 50.0) + np.arange(shape[-1])
    full = ("start", "criterion", *dims)
    maps = xr.Dataset(
        {
            "horizon": (full, field_of_limits),
            "status": (full, np.zeros(field_of_limits.shape, np.int8)),
        },
        coords={"start": ["2031"], "criterion": ["near"]},
        attrs={"variable": "x", "long_name": "ring", "lead_units": "1", "last_lead": 90.0},
    )
    curves = make_curves(variable="x", places=("Bank",))
    (figure,) = map_part((Result(curves, maps),), Ground(())).figures
    assert "Shortest: 50 time units, at x 0, y 0" in figure.words
    assert figure.steps
    unknown = maps.assign(status=maps["status"] + np.int8(Status.no_data))
    (figure,) = map_part((Result(curves, unknown),), Ground(())).figures
    assert figure.words.endswith("Share of the area: too little known: 100 %.")
    assert figure.steps == ()


def test_curves_cross_their_levels_where_the_limits_are():
    curves = make_curves(places=("Bank",), criteria=("gale",))
    lead = curves.lead.values
    grown = np.clip(lead / 40.0, 0.5, None)
    curves["spread_low"][:], curves["spread_high"][:] = grown * 0.9, grown * 1.1
    curves["spread"][:] = grown
    curves["horizon"][:], curves["low"][:], curves["high"][:] = 100.0, 90.0, 110.0
    limits = make_briefing([Result(curves)]).limits()
    plot = curve_plot(curves.isel(start=0, place=0), limits, with_chance=False)
    assert plot.logarithmic is False
    (level,) = plot.spread.levels
    assert level.drop == pytest.approx(LEFT + 100 / 240 * (RIGHT - LEFT), abs=0.06)
    path = dict(plot.spread.paths)["spread"]
    points = np.array([pair.split() for pair in path[1:].split("L")], dtype=float)
    # Threshold 2.5 on a line of 1/40 per hour is crossed at 100 h.
    assert np.interp(level.drop, points[:, 0], points[:, 1]) == pytest.approx(level.y, abs=0.15)
    (row,) = plot.strip
    assert row.mark == level.drop
    assert row.low == pytest.approx(LEFT + 90 / 240 * (RIGHT - LEFT), abs=0.06)


def test_a_curve_with_gaps_is_drawn_in_pieces():
    curves = make_curves(places=("Bank",), criteria=("gale",))
    curves["spread"][..., 10:12] = np.nan
    limits = make_briefing([Result(curves)]).limits()
    plot = curve_plot(curves.isel(start=0, place=0), limits, with_chance=False)
    assert dict(plot.spread.paths)["spread"].count("M") == 2
    curves["spread"][:] = np.nan
    nothing = curve_plot(curves.isel(start=0, place=0), limits, with_chance=False)
    assert nothing.spread.empty == "no curve: too little known"
    assert "no curve: too little known" in page_text(make_briefing([Result(curves)]))


# Fair CRPS of b less that of a by lead: as far as the last, b errs more.
WORSE = [(0.01, 0.02), (0.02, 0.03), (0.106, 0.08), (0.36, 0.2), (0.3, 0.7)]


def test_a_version_that_errs_more_is_not_praised_for_longer_limits(tmp_path, provenance):
    from test_versions_products import ROWS, make_differences, make_places
    from test_versions_products import Result as Compared

    longer = [ROWS[0]]
    shares = (xr.Dataset(), xr.Dataset())
    notes = {"Cautions": ["members that part too slowly gain hours"]}
    differences = make_differences(places=1, rows=WORSE)
    for folder, scores in (("scored", [differences]), ("bare", [])):
        compared = [Compared(make_places(longer), None, shares)]
        write_versions(
            tmp_path / folder, compared, provenance, notes=notes, scores=scores, figures=False
        )
    table = read_versions(tmp_path / "scored")
    # Of five leads two have an interval above nought; the middle is the third, the last the fifth.
    assert table.balance() == (
        "new holds longer in 1 of 1 row, old $x$ in 0, but to hold longer is not to err less: by "
        "fair CRPS old $x$ errs less in 2 of 5 rows of variable, place and lead, new in none."
    )
    page = Page(page_text(make_briefing(plain_results(), versions=table)))
    section = page.one("section", id="versions").text
    assert "members that part too slowly gain hours" in section
    assert "old $x$ errs less in 2 of 5 rows" in section
    assert "Of which version tonight’s runs are is not known." in section
    assert "tolerance 5 m s-1" in section
    rows = page.one("table", id="errors").text
    assert "+0.11 (+0.026 to +0.19) m s-1" in rows and "old $x$ errs less" in rows
    assert "+0.3 (−0.4 to +1) m s-1" in rows and "not told apart" in rows
    assert "48 h" in rows and "96 h" in rows and "72 h" not in rows
    ours = make_briefing(plain_results(), versions=replace(table, tonight="old $x$"))
    assert "Tonight’s runs are taken to be of old $x$" in page_text(ours)
    bare = read_versions(tmp_path / "bare")
    page = Page(page_text(make_briefing(plain_results(), versions=bare)))
    assert "Which of them errs less is not known" in page.one("section", id="versions").text
    assert page.all("table", id="errors") == []
    (tmp_path / "scored" / "score_differences.csv").write_text("variable,place\nwind,bank\n")
    with pytest.raises(InputError, match="no column against"):
        read_versions(tmp_path / "scored")


def test_past_skill_of_the_place_in_the_headline_comes_first():
    name = "wind_speed"
    skill = (
        past_skill("Harbour", variable=name, parting="cannot be told", ratio="0.92 (0.54 to 1.3)",
                   end="beyond the run (> 240 h; at least 155 h)"),
        past_skill("Bank", variable="pressure", long_name="pressure"),
        past_skill("Bank", variable=name, long_name="wind"),
    )  # fmt: skip
    page = Page(page_text(make_briefing(plain_results(), skill=skill)))
    section = page.one("section", id="skill").text
    first, second = section.index("wind: over"), section.index("pressure: over")
    assert first < second < section.index("Past skill at the other places")
    assert (
        "wind: over the last 13 verified starts the members part too little: the spread was 0.85 "
        "(0.77 to 0.94) of the error of the mean at 120 h for Bank."
    ) in section
    assert "ended at 210 h (155 to beyond the run), significant until 132 h, for Bank" in section
    others = page.one("table", id="skill-elsewhere").text
    for words in ("Harbour", "cannot be told", "0.92 (0.54 to 1.3)", "at least 155 h", "132 h"):
        assert words in others
    assert "Bank" not in others
    away = page_text(make_briefing(plain_results(), skill=skill[:1]))
    assert "Nothing is verified at Bank; other places follow." in away
    none = make_briefing(plain_results(), skill=(), no_skill="No past start: no analyses named.")
    assert "No past start: no analyses named." in page_text(none)


@pytest.mark.parametrize(
    ("kind", "name", "rule", "threshold", "units", "words"),
    [
        ("climatology_fraction", "climatology fraction 0.5", "climatology fraction 0.5", 4.99,
         "m s-1", "climatology fraction 0.5 (4.99 m s-1)"),
        ("climatology_fraction", "climatology fraction 0.5", "climatology fraction 0.5", 0.5,
         "m s-1", "climatology fraction 0.5 (0.5 m s-1)"),
        ("tolerance", "crane work", "tolerance 3", 3.0, "m s-1", "crane work (3 m s-1)"),
        ("tolerance", "tolerance 3", "tolerance 3", 3.0, "m s-1", "tolerance 3 m s-1"),
        ("chance", "chance 0.25 beyond 4", "chance 0.25 beyond 4", 0.25, "1",
         "a quarter of members more than 4 m s-1 from the median"),
        ("chance", "fog", "chance 0.5 beyond 4", 0.5, "1",
         "fog (half of members more than 4 m s-1 from the median)"),
        ("chance", "chance 0.1 beyond 4", "chance 0.1 beyond 4", 0.1, "1",
         "10 % of members more than 4 m s-1 from the median"),
    ],
)  # fmt: skip
def test_a_criterion_is_told_with_its_size_and_units(kind, name, rule, threshold, units, words):
    curves = make_curves(places=("Bank",), criteria=("one",))
    curves = curves.assign_coords(
        criterion=[name], criterion_kind=("criterion", [kind]),
        criterion_rule=("criterion", [rule]), threshold_units=("criterion", [units]),
    )  # fmt: skip
    curves["threshold"][:] = threshold
    page = Page(page_text(make_briefing([Result(curves)])))
    assert page.one("p", id=None, class_="lane-what").text == f"Bank 10 m wind speed: {words}"
    assert words in page.one("p", class_="headline").text
    row = " ".join(page.all("th", scope="row")[0].text.split())
    assert row.replace("(", "").replace(")", "") == words.replace("(", "").replace(")", "")
    assert any(words in item.text for item in page.all("li"))


def test_the_words_of_a_limit_follow_the_hold():
    curves = make_curves(places=("Bank",))
    plain = page_text(make_briefing([Result(curves)]))
    assert "is first reached, with its interval" in plain
    assert "Where the curve first reaches it, a line falls" in plain
    assert "for good" not in plain and "exceeded" not in plain
    held = Result(curves.assign_attrs(hold=12.0))
    assert "is first reached for at least 12 h," in page_text(make_briefing([held]))
    other = Result(curves.assign_attrs(variable="x", long_name="x"))
    assert "as the settings ask of the variable" in page_text(make_briefing([held, other]))


def test_all_maps_of_the_page_have_one_scale():
    names = [{"variable": name, "long_name": name} for name in ("wind", "pressure")]
    late = make_maps(GRIDS["tiny"](), **names[1])
    late = late.assign(horizon=late["horizon"] * 0.3)
    results = (
        Result(make_curves(places=("Bank",), **names[0]), make_maps(GRIDS["tiny"](), **names[0])),
        Result(make_curves(places=("Bank",), **names[1]), late),
    )
    figures = map_part(results, Ground(())).figures
    assert len(figures) == 4
    assert len({figure.picture.scale.bounds for figure in figures}) == 1
    bounds = figures[0].picture.scale.bounds
    values = np.concatenate(
        [one.maps["horizon"].values[one.maps["status"].values == 0] for one in results]
    )
    assert bounds[0] <= np.percentile(values, 1) and bounds[-1] >= np.percentile(values, 99)


def test_names_of_variables_begin_alike():
    results = [
        Result(make_curves(variable=name, long_name=long_name, places=("Bank",)))
        for name, long_name in (("u", "Eastward wind"), ("v", "northward wind"), ("p", "pH"))
    ]
    headings = [item.text for item in Page(page_text(make_briefing(results))).all("h3")]
    assert headings[:3] == ["Eastward wind", "Northward wind", "pH"]


def test_versions_are_read_back_and_shown(tmp_path, provenance):
    from test_versions_products import make_result

    write_versions(tmp_path, [make_result()], provenance, notes={}, figures=False)
    table = read_versions(tmp_path)
    assert (table.version_a, table.version_b) == ("old $x$", "new")
    assert table.starts == "24 common starts, 2031-01-05 00:00 UTC to 2031-01-28 00:00 UTC"
    shown = [row.text for row in table.rows]
    assert shown[:4] == [
        "+7.2 h (+5.1 to +9.3)",
        "−12 h (−20 to −4.8)",
        "+30 h (−5 to +65)",
        "+3 h",
    ]
    assert [row.survives for row in table.rows][:3] == [True, True, False]
    page = Page(page_text(make_briefing(plain_results(), versions=table)))
    section = page.one("section", id="versions").text
    assert "new holds longer in 1 of 7 rows, old $x$ in 1" in section
    assert "−12 h (−20 to −4.8)" in section
    assert "old $x$ holds longer" in section


@pytest.mark.parametrize(
    ("file", "content", "found"),
    [
        ("versions.csv", None, "no such file"),
        ("versions.nc", None, "no such file"),
        ("versions.nc", b"no NetCDF", "Unknown file format"),
        ("versions.csv", b"variable,place\nwind,bank\n", "no column kind"),
        ("versions.csv", b"\xff\xfe", "codec"),
    ],
)
def test_versions_that_cannot_be_read(tmp_path, provenance, file, content, found):
    from test_versions_products import make_result

    write_versions(tmp_path, [make_result()], provenance, notes={}, figures=False)
    path = tmp_path / file
    path.unlink()
    if content is not None:
        path.write_bytes(content)
    with pytest.raises(InputError, match=found) as raised:
        read_versions(tmp_path)
    assert file in raised.value.culprit
    assert "compare" in raised.value.remedy


def test_libraries_load_when_a_page_is_written_and_not_before():
    code = "import sys, ensemble_horizon.products.page; "
    code += "print([name in sys.modules for name in ('matplotlib', 'jinja2')])"
    found = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True)
    # dask, which other parts need, may load jinja2 itself; matplotlib nothing else may.
    assert found.stdout.startswith("[False")


def tokens():
    """Colours by name: of the light page, and of the dark one."""
    text = packaged("page.css")
    blocks = re.findall(r":root\s*\{([^}]*--paper[^}]*)\}", text)
    assert len(blocks) == 2
    light, dark = (dict(re.findall(r"--([\w-]+):\s*(#[0-9a-f]{6})", block)) for block in blocks)
    return {"light": light, "dark": light | dark}


def contrast(one, other):
    """Contrast ratio of two colours by WCAG 2.2, definition of relative luminance."""

    def luminance(colour):
        parts = [int(colour[place : place + 2], 16) / 255 for place in (1, 3, 5)]
        linear = [c / 12.92 if c <= 0.04045 else ((c + 0.055) / 1.055) ** 2.4 for c in parts]
        return 0.2126 * linear[0] + 0.7152 * linear[1] + 0.0722 * linear[2]

    high, low = sorted((luminance(one), luminance(other)), reverse=True)
    return (high + 0.05) / (low + 0.05)


# What text stands on. Letters of criteria stand on the page, and on their colour reversed.
TEXT = {
    "ink": ("paper", "sheet", "sand"),
    "soft": ("paper", "sheet"),
    "link": ("paper", "sheet"),
    "on-deep": ("deep",),
    "on-deep-soft": ("deep",),
    "place": ("halo",),
    "level": ("halo",),
    "sheet": tuple(f"c{number}" for number in range(6)),
    **{f"c{number}": ("paper", "sheet") for number in range(6)},
}
# Lines and shapes that tell something (WCAG 2.2, 1.4.11).
SHAPES = {
    "bar": ("paper", "before"),
    "before-edge": ("paper", "before"),
    "law": ("sheet", "band"),
    "ink": ("band",),
    "focus": ("paper", "sheet", "sand"),
    "on-deep": ("deep",),
}


def test_the_contrast_formula_gives_known_ratios():
    # From the W3C's own material, from memory: black on white 21, #767676 on white 4.54.
    assert contrast("#000000", "#ffffff") == pytest.approx(21)
    assert contrast("#767676", "#ffffff") == pytest.approx(4.54, abs=0.005)


@pytest.mark.parametrize("scheme", ["light", "dark"])
def test_contrast_is_enough_in_both_schemes(scheme):
    colours = tokens()[scheme]
    for pairs, least in ((TEXT, 4.5), (SHAPES, 3.0)):
        for front, grounds in pairs.items():
            for ground in grounds:
                ratio = contrast(colours[front], colours[ground])
                assert ratio >= least, f"{scheme}: {front} on {ground} is {ratio:.2f}"


def test_all_colours_of_text_and_grounds_are_among_those_held_against_each_other():
    style = re.sub(r"/\*.*?\*/", "", packaged("page.css"), flags=re.S)
    fronts, grounds = set(), set()
    for selector, body in re.findall(r"([^{}]+)\{([^{}]*)\}", style):
        fronts |= set(re.findall(r"(?<![\w-])color:\s*var\(--([\w-]+)\)", body))
        grounds |= set(re.findall(r"background:\s*var\(--([\w-]+)\)", body))
        if "text" in selector or ".level" in selector or ".day" in selector:
            fronts |= set(re.findall(r"(?<![\w-])fill:\s*var\(--([\w-]+)\)", body))
        literal = re.findall(r"(?<![\w-])(?:color|fill):\s*(#\w+)", body)
        assert literal == [], selector
    assert fronts <= set(TEXT)
    assert grounds <= {ground for pairs in TEXT.values() for ground in pairs}


def test_status_is_told_in_words_wherever_it_is_shown(page):
    words = {row.attributes["data-status"] for row in page.all("tr") if "data-status" in
             row.attributes}  # fmt: skip
    assert words == {status.name for status in Status}
    cells = {cell.text for cell in page.all("td", data_label="Status")}
    assert set(STATUS_WORDS.values()) <= cells


@pytest.mark.slow
def test_the_example_night_with_six_maps_is_below_a_megabyte_and_a_half(tmp_path):
    from pathlib import Path

    from ensemble_horizon.night.estimate import estimate
    from ensemble_horizon.night.writing import map_ground
    from ensemble_horizon.settings import read_settings

    settings = read_settings(Path(__file__).parents[2] / "configs" / "example.toml")
    results = tuple(estimate(settings).results)
    briefing = make_briefing(results, ground=map_ground(settings))
    path = write_page(tmp_path / "briefing.html", briefing)
    page = Page(path.read_text(encoding="utf-8"))
    assert len(page.all("figure", class_="map")) == 6
    assert path.stat().st_size < 1_500_000
