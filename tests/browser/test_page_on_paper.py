"""The briefing page on paper, as the browser prints it."""

from __future__ import annotations

import re

import numpy as np
import pytest
from headless import Browser
from pypdf import PdfReader
from pypdf.generic import ContentStream
from selenium.webdriver.common.by import By

pytestmark = pytest.mark.slow
A4 = (210 * 72 / 25.4, 297 * 72 / 25.4)  # ISO 216


def pictures(page, least=80.0):
    """Boxes (left, lower, right, upper) in points of the large pictures on a page."""
    found = []

    def look(stream, resources, matrix):
        stack = [matrix]
        for operands, operator in stream.operations:
            if operator == b"q":
                stack.append(stack[-1])
            elif operator == b"Q":
                stack.pop()
            elif operator == b"cm":
                stack[-1] = square(operands) @ stack[-1]
            elif operator == b"Do":
                item = resources["/XObject"][operands[0]].get_object()
                if item["/Subtype"] == "/Form":
                    inner = square(item.get("/Matrix", [1, 0, 0, 1, 0, 0])) @ stack[-1]
                    own = item.get("/Resources", resources).get_object()
                    look(ContentStream(item, page.pdf), own, inner)
                else:
                    corners = np.array([[0, 0, 1], [1, 1, 1]]) @ stack[-1]
                    (a, b), (c, d) = corners[:, :2]
                    found.append((min(a, c), min(b, d), max(a, c), max(b, d)))

    look(page.get_contents(), page["/Resources"], np.eye(3))
    return [box for box in found if box[2] - box[0] > least and box[3] - box[1] > least]


def square(numbers):
    a, b, c, d, e, f = (float(number) for number in numbers)
    return np.array([[a, b, 0], [c, d, 0], [e, f, 1]])


@pytest.mark.parametrize("name", ["night", "cells", "awkward"])
def test_no_map_is_cut_by_the_edge_of_a_page(browser: Browser, name, request, tmp_path):
    page = request.getfixturevalue(name)
    browser.show(page.path)
    count = len(browser.driver.find_elements(By.CSS_SELECTOR, "figure.map"))
    sheets = PdfReader(browser.paper(tmp_path / "page.pdf")).pages
    found = 0
    for sheet in sheets:
        assert [float(side) for side in sheet.mediabox[2:]] == pytest.approx(A4, abs=1.0)
        for left, lower, right, upper in pictures(sheet):
            assert left >= 20 and right <= A4[0] - 20
            assert lower >= 20 and upper <= A4[1] - 20
            found += 1
    # A map that is cut is drawn on two pages.
    assert found == count


def test_a_map_and_its_words_stand_on_the_same_page(browser, night, tmp_path):
    browser.show(night.path)
    captions = browser.run(
        "return [...document.querySelectorAll('figure.map')].map((one) => one.innerText)"
    )
    legends = sum(text.count("limit within the run") for text in captions)
    assert legends == len(captions) > 3
    for sheet in PdfReader(browser.paper(tmp_path / "page.pdf")).pages:
        words = sheet.extract_text()
        assert len(re.findall("limit within the run", words)) == len(pictures(sheet))


def test_a_map_over_the_edge_would_be_seen(browser, night, tmp_path):
    """The test of the test: maps made so tall that they cannot but be cut."""
    browser.show(night.path)
    count = len(browser.driver.find_elements(By.CSS_SELECTOR, "figure.map"))
    browser.run(
        "document.querySelectorAll('figure.map img').forEach("
        "(image) => { image.style.height = '1500px'; });"
    )
    sheets = PdfReader(browser.paper(tmp_path / "page.pdf")).pages
    boxes = [box for sheet in sheets for box in pictures(sheet)]
    inside = [box for box in boxes if box[1] >= 20 and box[3] <= A4[1] - 20]
    assert len(boxes) != count or len(inside) != len(boxes)


def test_paper_is_white_whatever_the_scheme(browser, night, tmp_path):
    papers = []
    for scheme in ("light", "dark"):
        browser.show(night.path, scheme=scheme)
        path = browser.paper(tmp_path / f"{scheme}.pdf")
        colours = set()
        for sheet in PdfReader(path).pages:
            contents = sheet.get_contents().get_data()
            colours |= set(re.findall(rb"[\d. ]+ (?:rg|RG)\b", contents))
        papers.append(colours)
    assert papers[0] == papers[1]
