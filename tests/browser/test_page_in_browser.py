"""The briefing page in a real browser: alone, legible, in its window, and telling the truth."""

from __future__ import annotations

import re
from pathlib import Path

import netCDF4
import numpy as np
import pytest
from headless import Browser
from selenium.common.exceptions import NoAlertPresentException
from selenium.webdriver import ActionChains, Keys
from selenium.webdriver.common.by import By

from ensemble_horizon.vocabulary import CAUTION, Status

pytestmark = pytest.mark.slow
LOOKS = (Path(__file__).parent / "looks.js").read_text(encoding="utf-8")
WIDTHS = (390, 1280, 1920)
PAGES = ("night", "cells", "awkward")
FAILED = "Network.loadingFailed"
NOWHERE = "http://127.0.0.1:9/"


@pytest.fixture(params=PAGES)
def page(request):
    return request.getfixturevalue(request.param)


def maps_of(browser: Browser):
    return browser.driver.find_elements(By.CSS_SELECTOR, "figure.map")


# ------------------------------------------------------------------ alone


@pytest.mark.parametrize("width", WIDTHS)
def test_no_complaint_and_no_request_but_the_page_itself(browser, page, width):
    browser.show(page.path, width)
    for figure in maps_of(browser):
        field = figure.find_element(By.CSS_SELECTOR, ".field")
        ActionChains(browser.driver).move_to_element(field).perform()
        field.send_keys(Keys.ARROW_RIGHT, Keys.ARROW_DOWN)
    browser.scheme("dark")
    assert browser.log() == []
    asked = browser.requests()
    assert page.path.as_uri() in asked
    assert {url for url in asked if not url.startswith("data:")} == {page.path.as_uri()}


def test_requests_and_complaints_would_be_seen(browser, tmp_path):
    path = tmp_path / "leak.html"
    path.write_text(f'<img src="{NOWHERE}a.png"><script>console.warn("heard")</script>')
    browser.show(path)
    assert f"{NOWHERE}a.png" in browser.requests()
    assert any("heard" in line for line in browser.log())


def test_the_policy_lets_nothing_in(browser, night):
    browser.show(night.path)
    browser.run(
        "const code = document.createElement('script'); code.textContent = 'window.ran = 1';"
        "document.body.append(code);"
        "const image = document.createElement('img'); image.src = arguments[0];"
        "document.body.append(image);"
        "document.body.setAttribute('onclick', 'window.ran = 2'); document.body.click();",
        f"{NOWHERE}b.png",
    )
    assert browser.run("return window.ran ?? null") is None
    # The picture was stopped by the policy, not by the network.
    assert "csp" in [event.get("blockedReason") for event in browser.events(FAILED)]
    assert sum("Content Security Policy" in line for line in browser.log()) >= 2


@pytest.mark.parametrize("width", WIDTHS)
def test_names_are_words_and_never_code(browser, awkward, width):
    browser.show(awkward.path, width)
    with pytest.raises(NoAlertPresentException):
        browser.driver.switch_to.alert  # noqa: B018 - asking is the test
    assert browser.run("return window.ran ?? null") is None
    assert (
        browser.run("return document.querySelectorAll('img[src=x], body *[onfocus]').length") == 0
    )
    runnable = (
        "return [...document.scripts].filter((one) => one.type !== 'application/json').length"
    )
    assert browser.run(runnable) == 1
    shown = browser.run("return document.body.innerText")
    for name in ("<script>window.ran = 1</script>", "<img src=x onerror='window.ran = 2'>",
                 "</style></title>", "北海", "]]> -->"):  # fmt: skip
        assert name in shown, name
    assert "<script>window.ran = 1</script>" in browser.driver.title


# ------------------------------------------------------------------ readout


class Grid:
    """Fields of one map in ``horizon_maps.nc``, and where its points lie in the picture."""

    def __init__(self, page, figure) -> None:
        variable, criterion = (
            figure.get_attribute(f"data-{name}") for name in ("variable", "criterion")
        )
        with netCDF4.Dataset(page.products / "horizon_maps.nc") as file:
            file.set_auto_mask(False)
            labels = [str(label) for label in file[f"{variable}_criterion_name"][:]]
            here = (labels.index(criterion), 0)
            self.horizon = file[f"{variable}_horizon"][here]
            self.status = file[f"{variable}_status"][here]
            self.high = file[f"{variable}_high"][here]
            names = {
                str(getattr(item, "standard_name", "")): key for key, item in file.variables.items()
            }
            self.latitude, self.longitude = file[names["latitude"]][:], file[names["longitude"]][:]

    def words_at(self, index) -> tuple[str, float, int]:
        """Position, limit and status of a grid point."""
        row, column = index
        north, east = float(self.latitude[row]), float(self.longitude[column])
        east = (east + 180) % 360 - 180
        place = (
            f"{abs(north):.2f}°{'N' if north >= 0 else 'S'} "
            f"{abs(east):.2f}°{'E' if east >= 0 else 'W'}"
        )
        return place, float(self.horizon[index]), int(self.status[index])


def read(figure):
    """Position, limit and status that a map reads out, and all of its words."""
    readout = figure.find_element(By.CSS_SELECTOR, ".readout")
    place = readout.find_element(By.TAG_NAME, "b").text
    words = readout.text
    limit = re.search(r"limit ([0-9.]+) h", words)
    return (
        place,
        float(limit[1]) if limit else None,
        int(readout.get_attribute("data-status")),
        words,
    )


def agrees(figure, grid, index):
    place, limit, status = grid.words_at(index)
    told_place, told_limit, told_status, words = read(figure)
    assert told_place == place
    assert told_status == status
    if status == Status.reached:
        assert told_limit == pytest.approx(limit, abs=0.5 if limit >= 9.95 else 0.05)
        assert ("beyond the run" in words) == bool(np.isinf(grid.high[index]))
    else:
        assert told_limit is None
        expected = {
            Status.beyond_run: "beyond the run",
            Status.at_start: "reached at the first lead",
            Status.no_growth: "no growth",
            Status.no_data: "too little known",
        }
        assert expected[Status(status)] in words


def points_of_every_status(grid, each=2):
    """Some grid points of every status that the map has, away from its rim."""
    rng = np.random.default_rng(5)
    found = []
    for status in np.unique(grid.status):
        here = np.argwhere(grid.status == status)
        inner = [
            tuple(int(n) for n in point)
            for point in here
            if all(0 < n < size - 1 for n, size in zip(point, grid.status.shape, strict=True))
        ]
        found += [inner[n] for n in rng.permutation(len(inner))[:each]]
    return found


def middle_of(browser, field, grid, index):
    """Where the middle of a grid point lies in the window, from the edges of the grid."""
    browser.run("arguments[0].scrollIntoView({block: 'center', behavior: 'instant'})", field)
    box = browser.run(
        "const box = arguments[0].querySelector('img').getBoundingClientRect();"
        "return [box.left, box.top, box.width, box.height]",
        field,
    )
    north_up = np.argsort(-grid.latitude)
    row = int(np.flatnonzero(north_up == index[0])[0])
    column = int(np.flatnonzero(np.argsort(grid.longitude) == index[1])[0])
    x = box[0] + box[2] * (column + 0.5) / grid.longitude.size
    y = box[1] + box[3] * (row + 0.5) / grid.latitude.size
    return x, y


def test_the_mouse_reads_the_values_of_the_file(browser, night):
    browser.show(night.path)
    seen = set()
    for figure in maps_of(browser):
        grid = Grid(night, figure)
        field = figure.find_element(By.CSS_SELECTOR, ".field")
        for index in points_of_every_status(grid):
            x, y = middle_of(browser, field, grid, index)
            browser.ask("Input.dispatchMouseEvent", type="mouseMoved", x=x, y=y)
            agrees(figure, grid, index)
            seen.add(int(grid.status[index]))
    assert seen == {int(status) for status in Status}


def test_a_tap_reads_the_values_of_the_file(browser, night):
    browser.show(night.path, 390, 844)
    for figure in maps_of(browser)[:2]:
        grid = Grid(night, figure)
        field = figure.find_element(By.CSS_SELECTOR, ".field")
        for index in points_of_every_status(grid, each=1):
            x, y = middle_of(browser, field, grid, index)
            browser.ask(
                "Input.dispatchTouchEvent", type="touchStart", touchPoints=[{"x": x, "y": y}]
            )
            browser.ask("Input.dispatchTouchEvent", type="touchEnd", touchPoints=[])
            agrees(figure, grid, index)


def test_arrow_keys_read_the_values_of_the_file(browser, night):
    browser.show(night.path)
    figure = maps_of(browser)[0]
    grid = Grid(night, figure)
    field = figure.find_element(By.CSS_SELECTOR, ".field")
    south_up = bool(grid.latitude[0] < grid.latitude[-1])
    down = -1 if south_up else 1
    rows, columns = grid.status.shape
    row, column = (rows - 1 - rows // 2 if south_up else rows // 2), columns // 2
    field.send_keys("")  # focus alone reads the middle
    agrees(figure, grid, (row, column))
    for keys, rows_on, columns_on in (
        ((Keys.ARROW_RIGHT,), 0, 1),
        ((Keys.ARROW_DOWN,) * 3, 3, 0),
        ((Keys.SHIFT, Keys.ARROW_LEFT), 0, -10),
        ((Keys.SHIFT, Keys.ARROW_UP), -10, 0),
        ((Keys.ARROW_LEFT,) * 2, 0, -2),
    ):
        field.send_keys(*keys)
        row, column = row + down * rows_on, column + columns_on
        agrees(figure, grid, (row, column))


def test_scattered_cells_read_out_a_cell_of_the_file(browser, cells):
    browser.show(cells.path)
    figure = maps_of(browser)[0]
    with netCDF4.Dataset(cells.products / "horizon_maps.nc") as file:
        file.set_auto_mask(False)
        horizon, status = (file[f"wind_speed_{name}"][0, 0] for name in ("horizon", "status"))
        names = {str(getattr(v, "standard_name", "")): k for k, v in file.variables.items()}
        latitude, longitude = file[names["latitude"]][:], file[names["longitude"]][:]
    field = figure.find_element(By.CSS_SELECTOR, ".field")
    browser.run("arguments[0].scrollIntoView({block: 'center', behavior: 'instant'})", field)
    box = field.find_element(By.TAG_NAME, "img").rect
    for across, down in np.random.default_rng(3).uniform(0.1, 0.9, (12, 2)):
        left, top = browser.run(
            "const box = arguments[0].getBoundingClientRect(); return [box.left, box.top]", field
        )
        browser.ask(
            "Input.dispatchMouseEvent", type="mouseMoved",
            x=left + across * box["width"], y=top + down * box["height"],
        )  # fmt: skip
        place, limit, state, _ = read(figure)
        north, south, east, west = (
            re.search(rf"([0-9.]+)°{side}", place) for side in ("N", "S", "E", "W")
        )
        y = float(north[1]) if north else -float(south[1])
        x = float(east[1]) if east else -float(west[1])
        off = np.hypot(latitude - y, (longitude - x + 180) % 360 - 180)
        cell = int(np.argmin(off))
        assert off[cell] < 0.01
        assert int(status[cell]) == state
        if state == Status.reached:
            assert limit == pytest.approx(float(horizon[cell]), abs=0.5)
        # It is a cell near the pointer: the picture shows the globe from edge to edge.
        assert abs(y - (90 - 180 * down)) < 4


# ------------------------------------------------------------------ looks


@pytest.mark.parametrize("width", WIDTHS)
def test_nothing_overflows(browser, page, width):
    browser.show(page.path, width)
    inner, wide = browser.run("return [innerWidth, document.documentElement.scrollWidth]")
    assert inner == width
    assert wide <= inner
    assert browser.run(f"{LOOKS}; return outside()") == []


def test_what_overflows_would_be_seen(browser, night):
    browser.show(night.path, 390)
    browser.run("document.querySelector('h1').style.marginLeft = '-30px'")
    assert browser.run(f"{LOOKS}; return outside()")


@pytest.mark.parametrize("scheme", ["light", "dark"])
@pytest.mark.parametrize("width", [390, 1280])
def test_contrast_of_all_text(browser, night, scheme, width):
    browser.show(night.path, width, scheme=scheme)
    looked_at = browser.run(f"{LOOKS}; return faint()")
    assert looked_at["counted"] > 200
    assert looked_at["found"] == []


def test_schemes_differ_and_faint_text_would_be_seen(browser, night):
    grounds = []
    for scheme in ("light", "dark"):
        browser.show(night.path, scheme=scheme)
        grounds.append(browser.run("return getComputedStyle(document.body).backgroundColor"))
    assert grounds[0] != grounds[1]
    browser.show(night.path)
    browser.run("document.querySelector('.caution').style.color = 'rgb(150, 150, 150)'")
    (found,) = browser.run(f"{LOOKS}; return faint()")["found"]
    # The formula of WCAG 2.2 by hand, for that grey on the ground of the page.
    ground = [int(part) for part in re.findall(r"\d+", grounds[0])]
    low, high = luminance([150] * 3), luminance(ground)
    assert f" {(high + 0.05) / (low + 0.05):.2f}," in found


def luminance(colour):
    shares = [value / 255 for value in colour]
    linear = [x / 12.92 if x <= 0.04045 else ((x + 0.055) / 1.055) ** 2.4 for x in shares]
    return float(np.dot([0.2126, 0.7152, 0.0722], linear))


# ------------------------------------------------------------------ without script


def test_all_is_there_without_script(browser, night, tmp_path):
    from pypdf import PdfReader

    browser.show(night.path)
    paper = [browser.paper(tmp_path / "with.pdf")]
    with browser.without_scripts():
        browser.show(night.path)
        paper.append(browser.paper(tmp_path / "without.pdf"))
        shot = browser.ask("DOMSnapshot.captureSnapshot", computedStyles=[])
    texts = [" ".join(one.extract_text() for one in PdfReader(path).pages) for path in paper]
    assert texts[0] == texts[1]
    counts = [sum(len(one.images) for one in PdfReader(path).pages) for path in paper]
    assert counts[0] == counts[1] > 4
    # On the screen: the layout holds the words, and nothing that only a script could answer.
    layout = shot["documents"][0]["layout"]
    shown = " ".join(shot["strings"][n] for n in layout["text"] if n >= 0)
    for words in ("Member 7 is missing", "Quiet bay", "air pressure at sea level", CAUTION[:40]):
        assert words in shown, words
    assert "Point at" not in shown and "arrow keys" not in shown
