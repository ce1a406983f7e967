"""The briefing on one sheet of A4, read back by pypdf and measured by the plotting library."""

from __future__ import annotations

import itertools
import re
from dataclasses import replace
from datetime import UTC, datetime

import numpy as np
import pytest
import xarray as xr
from pypdf import PdfReader
from synthetic_products import GRIDS, Result, make_curves, make_maps
from test_versions_products import ROWS, make_places

from ensemble_horizon.errors import ProductError
from ensemble_horizon.horizon.usual import Standing, Usual
from ensemble_horizon.products import gains
from ensemble_horizon.products.fitted_text import broken, drawable, shortened, text_width
from ensemble_horizon.products.page import Briefing, VersionsTable
from ensemble_horizon.products.page.error_rows import ErrorRow
from ensemble_horizon.products.places import Ground, PlaceMark
from ensemble_horizon.products.score_sentences import PastSkill
from ensemble_horizon.products.sheet_pdf import draw_sheet, write_sheet
from ensemble_horizon.vocabulary import CAUTION

MADE = datetime(2031, 1, 5, 6, 40, tzinfo=UTC)
POINTS_OF_A_MILLIMETRE = 72 / 25.4
AWKWARD = (
    "<script>alert(1)</script>",
    "W" * 70,
    "北海 灯 $x^2_{1}$ \n newline",
    "a name that goes on and on, with many words, until nobody would read it any more",
    "' \" & % # \\ ~ é ß ñ ﬁ \u202e rtl",
)
INF, NAN = float("inf"), float("nan")


def briefing(*results, **more):
    facts = {"title": "The desk at Quillmere", "members": "19 of 20 members", "version": "0.1.0"}
    return Briefing(start="2031-01-05T00:00:00", made=MADE, results=results, **(facts | more))


def one_limit():
    curves = make_curves(places=("domain",), criteria=("gale",))
    return briefing(Result(curves, make_maps(GRIDS["tiny"](), criteria=("gale",))))


def many_limits():
    places = tuple(f"Place number {number}" for number in range(8))
    usual = Usual(30, 100.0, 50.0, INF, 4.0, Standing.shorter)
    results = [
        Result(
            make_curves(
                variable=f"v{number}", long_name=f"variable {number} of twelve",
                places=places, seed=number, chance=True,
            ),
            make_maps(
                GRIDS["tiny"](), variable=f"v{number}", long_name=f"variable {number} of twelve"
            ),
        )
        for number in range(12)
    ]  # fmt: skip
    marks = [PlaceMark.site(name, 4 + 0.3 * n, 52 + 0.1 * n) for n, name in enumerate(places)]
    return briefing(
        *results,
        usual={("v0", place, "gale/spread"): usual for place in places},
        troubles=tuple(f"member {number} ends early" for number in range(9)),
        notes=tuple(f"note {number}: a sentence that goes on a little" for number in range(30)),
        ground=Ground(tuple(marks)),
    )


def awkward_names():
    names = {"variable": 'a/b c"<b>', "long_name": f"the {'W' * 120} wind"}
    criteria = (f"crit <i>{'M' * 90}", "$\\frac{1}{2}$ sat")
    return briefing(
        Result(
            make_curves(places=AWKWARD, criteria=criteria, units="a very long unit " * 4, **names),
            make_maps(GRIDS["tiny"](), criteria=criteria, **names),
        ),
        title=f"A title {'that does not end ' * 20}",
        members=f"19 of 20 {'members ' * 30}",
        troubles=("W" * 300, "x " * 300),
        notes=("N" * 500,),
        skill=(PastSkill("a", "S " * 100, "S " * 300, "analysis", 3, "1 h", "1", "too little"),),
        ground=Ground(
            (
                PlaceMark.box(AWKWARD[1], 3, 7, 51, 53),
                *(PlaceMark.site(AWKWARD[n], 3 + n, 52 + 0.2 * n) for n in (0, 2, 3)),
            )
        ),
    )


CASES = {"one limit": one_limit, "many limits": many_limits, "awkward names": awkward_names}


@pytest.fixture(scope="module", params=list(CASES))
def boxes(request):
    """Figure texts, all texts, and frames of the axes of a sheet, as boxes in fractions of it."""
    figure = draw_sheet(CASES[request.param]()).figure
    figure.set_dpi(600)  # fine enough that letters are not moved to pixels
    figure.draw_without_rendering()
    size = figure.bbox.size

    def box(artist):
        found = artist.get_window_extent(figure.canvas.get_renderer())
        return artist, (*(found.min / size), *(found.max / size))

    texts = [box(text) for text in figure.texts if text.get_text()]
    inner = [
        box(text)
        for axes in figure.axes
        for text in (*axes.texts, *axes.get_xticklabels(), *axes.get_yticklabels())
        if text.get_text() and text.get_visible()
    ]
    return texts, [*texts, *inner], [box(axes) for axes in figure.axes]


def apart(one, other, least=2e-4):
    return (
        one[2] <= other[0] + least
        or other[2] <= one[0] + least
        or one[3] <= other[1] + least
        or other[3] <= one[1] + least
    )


def test_nothing_leaves_the_page(boxes):
    _, everything, frames = boxes
    for artist, (left, lower, right, upper) in [*everything, *frames]:
        assert left > 0.03 and right < 0.97 and lower > 0.02 and upper < 0.98, artist


def test_no_words_cover_others_or_a_picture(boxes):
    texts, _, frames = boxes
    assert len(texts) > 10
    for (one, first), (other, second) in itertools.combinations(texts, 2):
        assert apart(first, second), (one.get_text(), other.get_text())
    for (one, first), (frame, second) in itertools.product(texts, frames):
        assert apart(first, second), (one.get_text(), frame)


def words_of(path):
    (page,) = PdfReader(path).pages
    return " ".join(page.extract_text().split())


def test_one_page_of_a4_with_its_fonts(tmp_path):
    path = write_sheet(tmp_path / "briefing.pdf", one_limit())
    (page,) = PdfReader(path).pages
    size = [float(side) / POINTS_OF_A_MILLIMETRE for side in page.mediabox[2:]]
    assert size == pytest.approx([210, 297], abs=0.1)  # ISO 216
    fonts = [font.get_object() for font in page["/Resources"]["/Font"].values()]
    assert fonts
    for font in fonts:
        inner = font["/DescendantFonts"][0].get_object()
        assert "/FontFile2" in inner["/FontDescriptor"].get_object()


def test_what_stands_on_the_sheet(tmp_path):
    usual = {
        ("wind_speed", "North bank", "sat 0.7"): Usual(30, 160.0, 110.0, INF, 4, Standing.shorter),
        ("wind_speed", "Skerry light", "sat 0.7"): Usual.unknown(3),
    }
    result = Result(make_curves(), make_maps(GRIDS["tiny"]()))
    told = briefing(
        result, usual=usual, troubles=("member 7 is missing",),
        no_skill="No past start is verified: none named.",
    )  # fmt: skip
    words = words_of(write_sheet(tmp_path / "briefing.pdf", told))
    for expected in (
        "The desk at Quillmere",
        "Start 2031-01-05 00:00 UTC",
        "19 of 20 members",
        "member 7 is missing",
        "No past start is verified: none named.",
        "160 (110 to > 240)",
        "shorter than about 29 of 30",
        "3 of the 10 nights",
        "made 2031-01-05 06:40 UTC",
        CAUTION,
    ):
        assert expected in words, expected
    # The limits of the synthetic curves, from the inversion of the logistic law at its threshold.
    first = make_curves().isel(place=0, start=0)
    assert f"{float(first.horizon[0]):.0f} h" in words
    assert "reached at the first lead" in words
    assert "more on the page" not in words


@pytest.mark.slow
def test_what_does_not_fit_is_counted(tmp_path):
    told = many_limits()
    words = words_of(write_sheet(tmp_path / "briefing.pdf", told))
    rows = sum(words.count(f"Place number {number} variable") for number in range(8))
    counts = [int(found) for found in re.findall(r"and (\d+) more on the page", words)]
    assert 12 * 8 * 3 - rows in counts and rows >= 5
    assert 9 - 5 in counts  # troubles


@pytest.mark.slow
def test_names_break_where_there_is_room_and_a_threshold_is_never_cut(tmp_path):
    long = "a place with a name that is much too long for one line of a narrow column"
    criteria = ("crane work at the far end of the quay, all winds, day and night",)
    for count in (2, 60):
        places = tuple(f"{long}, {number}" for number in range(count))
        told = briefing(Result(make_curves(places=places, criteria=criteria)))
        words = words_of(write_sheet(tmp_path / "briefing.pdf", told))
        shown = count if count == 2 else words.count("2.5 m s-1") - 1
        assert words.count("(2.5 m s-1)") >= shown > 1
        # In several lines all of it stands there, in one it is cut.
        assert (words.count("narrow column") >= 2) == (count == 2)


def test_a_logarithmic_axis_is_told(tmp_path):
    curves = make_curves(places=("Bank",), criteria=("gale",))
    path = tmp_path / "briefing.pdf"
    spread = curves["spread"].copy()
    for factor, told in ((1.0, False), (1000.0, True)):
        grown = np.linspace(1.0, factor, spread.sizes["lead"])
        curves["spread"] = spread * xr.DataArray(grown, dims="lead")
        words = words_of(write_sheet(path, briefing(Result(curves))))
        assert ("equal steps up for equal ratios" in words) == told


def test_versions_are_weighed_on_the_sheet(tmp_path):
    errors = [
        ErrorRow("w", "Bank", "analysis", "crps", lead, "hours", 30, 1.0, 1.1, 0.1, 0.04, 0.16,
                 True, "m s-1")
        for lead in (0.0, 120.0)
    ]  # fmt: skip
    rows = tuple(gains([make_places([ROWS[0]])]))
    versions = VersionsTable("old", "new", "30 starts", rows, errors=tuple(errors))
    told = replace(one_limit(), versions=versions)
    words = words_of(write_sheet(tmp_path / "briefing.pdf", told))
    assert "to hold longer is not to err less: by fair CRPS old errs less in 2 of 2 rows" in words


def test_the_same_briefing_makes_the_same_bytes(tmp_path):
    told = briefing(Result(make_curves(places=("domain",), criteria=("gale",))))
    pages = [write_sheet(tmp_path / f"{n}.pdf", told).read_bytes() for n in (1, 2)]
    assert pages[0] == pages[1]
    about = PdfReader(tmp_path / "1.pdf").metadata
    assert about.creation_date == MADE and about.modification_date == MADE
    assert about.title == "The desk at Quillmere, 2031-01-05 00:00 UTC"


def test_a_place_without_any_number(tmp_path):
    curves = make_curves(places=("domain",), criteria=("gale",))
    for name in ("spread", "spread_low", "spread_high", "fitted", "horizon", "low", "high"):
        curves[name] = curves[name] * NAN
    curves["status"] = (curves["status"] * 0 + 4).astype(np.int8)
    words = words_of(write_sheet(tmp_path / "briefing.pdf", briefing(Result(curves))))
    assert "too little known" in words


def test_a_sheet_that_cannot_be_written(tmp_path):
    (tmp_path / "file").write_text("in the way")
    with pytest.raises(ProductError, match="a file stands in the way"):
        write_sheet(tmp_path / "file" / "briefing.pdf", one_limit())


@pytest.mark.parametrize("words", [*AWKWARD, "x " * 300, "i" * 500, "three short words"])
@pytest.mark.parametrize("bold", [True, False])
def test_words_are_cut_and_broken_to_their_room(words, bold):
    for room in (40.0, 200.0):
        for line in (shortened(words, room, 8, bold=bold), *broken(words, room, 8, bold=bold)):
            assert text_width(line, 8, bold=bold) <= room
    whole = broken(words, 200.0, 8, most=100, bold=bold)
    assert "".join(whole).replace(" ", "") == drawable(words).replace(" ", "")
