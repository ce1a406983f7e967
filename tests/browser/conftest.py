"""A browser, and pages made from synthetic products of every status."""

from __future__ import annotations

import os
import sys
from collections.abc import Iterator
from dataclasses import dataclass
from datetime import UTC, datetime
from pathlib import Path

import numpy as np
import pytest
import xarray as xr
from headless import CHROMIUM, DRIVER, Browser

# The synthetic products stand with the tests of products.
sys.path.append(str(Path(__file__).parents[1] / "products"))

from synthetic_products import GRIDS, Result, make_curves, make_maps

from ensemble_horizon.horizon.usual import Standing, Usual
from ensemble_horizon.products import Ground, PlaceMark, write_products
from ensemble_horizon.products.gains import Gain
from ensemble_horizon.products.page import Briefing, VersionsTable, write_page
from ensemble_horizon.products.page.error_rows import ErrorRow
from ensemble_horizon.products.score_sentences import PastSkill
from ensemble_horizon.products.stored import read_results
from ensemble_horizon.vocabulary import Status

NEED = "EH_NEED_BROWSER"
MADE = datetime(2031, 1, 5, 6, 40, tzinfo=UTC)
INF = float("inf")
TAG = "<script>window.ran = 1</script>"
IMAGE = "<img src=x onerror='window.ran = 2'>"


@dataclass(frozen=True)
class Page:
    """A page, and the folder of the products that it was made from."""

    path: Path
    products: Path
    briefing: Briefing


@pytest.fixture(scope="session")
def browser(tmp_path_factory: pytest.TempPathFactory) -> Iterator[Browser]:
    if CHROMIUM is None or DRIVER is None:
        words = "no chromium and chromedriver (Debian: apt install chromium chromium-driver)"
        if os.environ.get(NEED):
            pytest.fail(words)
        pytest.skip(words)
    found = Browser(tmp_path_factory.mktemp("profile"))
    yield found
    found.quit()


def _page(folder: Path, results: list[Result], **facts) -> Page:
    provenance = {"inputs": ["m00.nc"], "settings": "", "version": "0.1.0", "created": MADE}
    write_products(folder, results, provenance, figures=False)
    briefing = Briefing(
        start="2031-01-05T00:00:00", made=MADE, results=tuple(read_results(folder)),
        **({"title": "The desk at Quillmere", "members": "19 of 20 members"} | facts),
    )  # fmt: skip
    return Page(write_page(folder / "briefing.html", briefing), folder, briefing)


def _gain(name: str, gained: float, survives: bool) -> Gain:
    return Gain(
        variable="wind_speed", long_name="10 m wind speed", place=name, kind="site",
        criterion="gale", criterion_text="gale (2.5 m s-1)", starts=30, horizon_a=80.0,
        horizon_b=80.0 + gained, gained=gained, low=gained - 3, high=gained + 3, p_value=0.01,
        adjusted_p_value=0.02, survives=survives, log_rank_p=0.03, beyond_a=1, beyond_b=2,
        counted_to=240.0, units="hours", reason="", version_a="old", version_b="new",
    )  # fmt: skip


def _every_status(maps: xr.Dataset) -> xr.Dataset:
    """The maps with a patch each of what the synthetic ones lack on a small grid."""
    for column, status, value in ((8, Status.at_start, 3.0), (30, Status.no_data, np.nan)):
        patch = {"latitude": slice(10, 18), "longitude": slice(column, column + 12)}
        maps["status"][patch] = np.int8(status)
        for name in ("horizon", "low", "high"):
            maps[name][patch] = value
    return maps


@pytest.fixture(scope="session")
def night(tmp_path_factory: pytest.TempPathFactory) -> Page:
    """Two variables on a plain grid, with everything that a page can tell."""
    places = ("North bank", "Skerry light", "Strait, inner [B]", "Outer shelf", "Quiet bay")
    pressure = {"variable": "pressure", "long_name": "air pressure at sea level", "units": "Pa"}
    results = [
        Result(make_curves(chance=True), _every_status(make_maps(GRIDS["regional"]()))),
        Result(make_curves(**pressure, seed=3), make_maps(GRIDS["regional"](), **pressure, seed=9)),
    ]
    usual = {
        ("wind_speed", places[0], "sat 0.7"): Usual(30, 160.0, 110.0, INF, 4, Standing.shorter),
        ("wind_speed", places[1], "sat 0.7"): Usual(30, 90.0, 60.0, 110.0, 96, Standing.longer),
        ("wind_speed", places[0], "gale/spread"): Usual(30, 80.0, 60.0, 99.0, 51, Standing.usual),
        ("pressure", places[0], "sat 0.7"): Usual.unknown(3),
    }
    errors = tuple(
        ErrorRow("wind_speed", places[0], "analysis", "crps", lead, "hours", 30, 1.0, 1.1, 0.1,
                 0.04, 0.16, True, "m s-1")
        for lead in (0.0, 120.0, 240.0)
    )  # fmt: skip
    gains = (_gain(places[0], 6.5, True), _gain(places[1], -2.0, False))
    return _page(
        tmp_path_factory.mktemp("night"),
        results,
        usual=usual,
        troubles=("Member 7 is missing: no file holds it.", "Member 3 ends early, at 120 h."),
        skill=tuple(
            PastSkill(
                "wind_speed",
                "10 m wind speed",
                place,
                "analysis",
                30,
                "120 h",
                "0.85 (0.77 to 0.94)",
                "too little",
                "skill over climatology",
                "beyond the run (> 240 h; at least 155 h)",
                "132 h",
            )
            for place in places
        ),
        notes=("Calibration in force.",),
        versions=VersionsTable("old", "new", "30 common starts", gains, errors=errors),
        ground=Ground((PlaceMark.box(places[0], -8, 4, 52, 58), PlaceMark.site(places[1], 2, 55))),
        version="0.1.0",
    )


@pytest.fixture(scope="session")
def cells(tmp_path_factory: pytest.TempPathFactory) -> Page:
    """Scattered cells around the globe."""
    result = Result(make_curves(places=("domain",)), make_maps(GRIDS["cells"]()))
    return _page(tmp_path_factory.mktemp("cells"), [result])


@pytest.fixture(scope="session")
def awkward(tmp_path_factory: pytest.TempPathFactory) -> Page:
    """Names that are long, strange, or would be code if they were not escaped."""
    places = (TAG, IMAGE, "W" * 80, "北海 灯 ' \" & </style></title> \u202e rtl", "a b " * 30)
    names = {"variable": f'a/b "{TAG}', "long_name": f"wind {IMAGE} {'M' * 60}"}
    criteria = (f"gale {TAG}{'i' * 60}", '" onfocus="window.ran = 3')
    result = Result(
        make_curves(places=places, criteria=criteria, units="m s-1", **names),
        make_maps(GRIDS["tiny"](), criteria=criteria, **names),
    )
    return _page(
        tmp_path_factory.mktemp("awkward"),
        [result],
        title=f"Desk {TAG} {IMAGE} {'W' * 90}",
        members=f"19 of 20 {TAG}",
        troubles=(f"member {TAG} {'x' * 300}",),
        skill=tuple(
            PastSkill(
                names["variable"],
                names["long_name"],
                place,
                "observation",
                9,
                TAG,
                f"1 {IMAGE}",
                "too little",
                TAG,
                "beyond the run " + "W" * 60,
                IMAGE,
            )
            for place in places
        ),
        notes=(f"]]> --> {TAG}",),
        ground=Ground((PlaceMark.box(TAG, 3, 7, 51, 53), PlaceMark.site("W" * 80, 4, 52))),
    )
