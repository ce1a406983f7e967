"""A sheet of a figure measured in pixels: axes and texts stand where they are put.

Drawing goes to the Agg canvas directly, so no display, no global state and no back end is touched.
"""

from __future__ import annotations

import io
import textwrap
from pathlib import Path

import numpy as np
from matplotlib.axes import Axes
from matplotlib.backends.backend_agg import FigureCanvasAgg
from matplotlib.figure import Figure
from matplotlib.patches import Rectangle

from ensemble_horizon.products.writing import written_whole

DPI = 120
INK = "#22303a"
SOFT_INK = "#5b6770"
FAINT = "#d5d9dc"
# Width of a usual letter of the default face, and of its bold cut, in units of its size.
LETTER, BOLD_LETTER = 0.51, 0.61


class Sheet:
    """A white sheet of ``width`` by ``height`` pixels; positions count from the top left."""

    def __init__(self, width: int, height: int) -> None:
        self.width, self.height = width, height
        self.figure = Figure(figsize=(width / DPI, height / DPI), dpi=DPI, facecolor="white")
        FigureCanvasAgg(self.figure)

    def axes(self, left: float, top: float, width: float, height: float) -> Axes:
        """Return axes at a place in pixels."""
        bottom = self.height - top - height
        axes = self.figure.add_axes(
            (left / self.width, bottom / self.height, width / self.width, height / self.height)
        )
        axes.tick_params(labelsize=8, colors=SOFT_INK, length=3, width=0.6)
        for spine in axes.spines.values():
            spine.set(color=SOFT_INK, linewidth=0.6)
        return axes

    def text(
        self,
        left: float,
        top: float,
        words: str,
        *,
        size: float = 9,
        weight: str = "normal",
        colour: str = INK,
        align: str = "left",
    ) -> None:
        """Write ``words`` with their upper edge at ``top``; no mark-up is read in them."""
        # Baselines, not upper edges of letters: neighbours then stand level whatever their words.
        first = top + 0.78 * size * DPI / 72
        for position, line in enumerate(words.split("\n")):
            self.figure.text(
                left / self.width,
                1 - (first + position * line_height(size)) / self.height,
                line,
                fontsize=size,
                fontweight=weight,
                color=colour,
                ha=align,
                va="baseline",
                parse_math=False,
            )

    def swatch(self, left: float, top: float, picture: np.ndarray) -> None:
        """Set a small picture (rows, columns, 3) of bytes down, pixel for pixel, with a rim."""
        rows, columns = picture.shape[:2]
        bottom = self.height - round(top) - rows
        self.figure.figimage(picture[::-1], round(left), bottom, origin="lower")
        self.figure.add_artist(
            Rectangle(
                (left / self.width, bottom / self.height),
                columns / self.width,
                rows / self.height,
                fill=False,
                edgecolor=SOFT_INK,
                linewidth=0.6,
            )
        )

    def save(self, path: Path, *, software: str) -> Path:
        """Write the sheet as PNG, whole or not at all."""
        picture = io.BytesIO()
        self.figure.savefig(
            picture,
            format="png",
            dpi=DPI,
            metadata={"Software": software},
            pil_kwargs={"compress_level": 4},
        )
        with written_whole(path) as neighbour:
            neighbour.write_bytes(picture.getbuffer())
        return path


def line_height(size: float) -> float:
    """Return the height of a line of text of ``size`` points, in pixels."""
    return size * DPI / 72 * 1.28


def wrapped(
    words: str, width: float, size: float, *, most: int = 4, bold: bool = False
) -> list[str]:
    """Return ``words`` broken into lines that fit ``width`` pixels, cut after ``most`` lines."""
    letter = BOLD_LETTER if bold else LETTER
    letters = max(int(width / (size * DPI / 72 * letter)), 12)
    return textwrap.wrap(words, letters, max_lines=most, placeholder=" …") or [""]
