"""Panels in rows and columns on a sheet: title above, legend below it, notes at the foot."""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from dataclasses import dataclass

from ensemble_horizon.products.sheet import SOFT_INK, Sheet, line_height

_TITLE, _SUBTITLE, _NOTE, _LEGEND_ROW = 13.5, 9.5, 7.5, 22


@dataclass(frozen=True)
class PanelGrid:
    """Panels of one size; all lengths are pixels.

    Attributes
    ----------
    count, columns : int
    width, height : float
        Of each panel.
    margin, gap, space : float
        Left of the first column, between columns, between rows.
    """

    count: int
    columns: int
    width: float
    height: float
    margin: float
    gap: float
    space: float

    @property
    def sheet_width(self) -> float:
        """Width of the whole sheet."""
        return self.margin + self.columns * (self.width + self.gap) - self.gap + 34

    @property
    def room(self) -> float:
        """Width that words may take."""
        return self.sheet_width - 40

    def corners(self, upper: float) -> Iterator[tuple[float, float]]:
        """Left and upper edge of each panel, row by row; the first row stands at ``upper``."""
        for position in range(self.count):
            row, column = divmod(position, self.columns)
            left = self.margin + column * (self.width + self.gap)
            yield left, upper + row * (self.height + self.space)

    def sheet(
        self,
        title: Sequence[str],
        subtitle: Sequence[str],
        legend_rows: int,
        notes: Sequence[str],
    ) -> tuple[Sheet, float, float]:
        """Return a sheet with its words, where its legend begins, and where its panels do."""
        rows = -(-self.count // self.columns)
        head = 16 + len(title) * line_height(_TITLE) + len(subtitle) * line_height(_SUBTITLE) + 10
        upper = head + legend_rows * _LEGEND_ROW + 14
        foot = upper + rows * self.height + (rows - 1) * self.space + 8
        sheet = Sheet(int(self.sheet_width), int(foot + len(notes) * line_height(_NOTE) + 14))
        sheet.text(20, 16, "\n".join(title), size=_TITLE, weight="bold")
        lower = 18 + len(title) * line_height(_TITLE)
        sheet.text(20, lower, "\n".join(subtitle), size=_SUBTITLE, colour=SOFT_INK)
        sheet.text(20, foot, "\n".join(notes), size=_NOTE, colour=SOFT_INK)
        return sheet, head, upper
