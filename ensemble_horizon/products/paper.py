"""A sheet of A4 paper: what a figure is drawn on, written as PDF."""

from __future__ import annotations

import io
from collections.abc import Sequence
from datetime import datetime
from pathlib import Path

import matplotlib as mpl
import numpy as np
from matplotlib.lines import Line2D
from matplotlib.patches import Rectangle

from ensemble_horizon.products.sheet import DPI, SOFT_INK, Sheet, line_height
from ensemble_horizon.products.writing import written_whole

WIDTH, HEIGHT = round(210 / 25.4 * DPI), round(297 / 25.4 * DPI)
MARGIN = 54
_PIECES = 3  # points of a picture to a pixel of the sheet: hatches stay sharp on paper


class Paper(Sheet):
    """One page of A4; positions count in pixels from the top left, as on any sheet."""

    def __init__(self) -> None:
        super().__init__(WIDTH, HEIGHT)

    def lines(
        self, left: float, top: float, words: Sequence[str], *, size: float = 8, **style: str
    ) -> float:
        """Write lines below one another and return where the next one would stand."""
        self.text(left, top, "\n".join(words), size=size, **style)
        return top + len(words) * line_height(size)

    def area(self, box: tuple[float, float, float, float], colour: str) -> None:
        """Fill a box of left, top, width and height."""
        left, top, width, height = box
        corner = (left / WIDTH, 1 - (top + height) / HEIGHT)
        size = (width / WIDTH, height / HEIGHT)
        self.figure.add_artist(Rectangle(corner, *size, facecolor=colour, linewidth=0, zorder=0))

    def rule(self, y: float) -> None:
        """Draw a thin level line between the margins."""
        level = 1 - y / HEIGHT
        ends = [MARGIN / WIDTH, 1 - MARGIN / WIDTH]
        self.figure.add_artist(Line2D(ends, [level, level], color=SOFT_INK, linewidth=0.6))

    def swatch(self, left: float, top: float, picture: np.ndarray) -> None:
        """Set a small picture (rows, columns, 3) of bytes down with a rim, at any resolution."""
        rows, columns = picture.shape[:2]
        axes = self.axes(round(left), round(top), columns, rows)
        axes.imshow(picture, aspect="auto", interpolation="nearest")
        axes.set(xticks=[], yticks=[])

    def write(self, path: Path, *, title: str, software: str, made: datetime) -> Path:
        """Write the page as PDF, whole or not at all; ``made`` is the only time that goes in."""
        page = io.BytesIO()
        about = {
            "Title": title,
            "Creator": software,
            "CreationDate": made,
            "ModDate": made,
        }
        # TrueType outlines, embedded: the words can be searched, copied and read aloud.
        with mpl.rc_context({"pdf.fonttype": 42, "pdf.compression": 6}):
            self.figure.savefig(page, format="pdf", dpi=_PIECES * DPI, metadata=about)
        with written_whole(path) as neighbour:
            neighbour.write_bytes(page.getbuffer())
        return path
