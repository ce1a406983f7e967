"""Words held against the room they have: measured letter by letter, cut or broken to fit."""

from __future__ import annotations

import unicodedata
from functools import lru_cache

from matplotlib.font_manager import FontProperties, findfont, get_font
from matplotlib.textpath import text_to_path

from ensemble_horizon.products.sheet import DPI

_UNDRAWABLE = "\ufffd"


def drawable(words: str) -> str:
    """Return ``words`` on one line, with a mark for each letter that the face does not have.

    Examples
    --------
    >>> drawable("Skerry\\tlight\\n"), drawable("灯 light")
    ('Skerry light', '� light')
    """
    known = _letters()
    plain = "".join(" " if letter.isspace() else letter for letter in words)
    plain = "".join(
        letter if ord(letter) in known else _UNDRAWABLE
        for letter in plain
        if unicodedata.category(letter) not in ("Cc", "Cf")
    )
    return " ".join(plain.split())


def text_width(words: str, size: float, *, bold: bool = False) -> float:
    """Return the width of ``words`` of ``size`` points in pixels of a sheet.

    It is that of the outlines, as on paper; letters on a screen are moved to whole pixels.
    """
    face = FontProperties(size=size, weight="bold" if bold else "normal")
    width, _, _ = text_to_path.get_text_width_height_descent(words, face, False)
    return float(width) * DPI / 72


def shortened(words: str, width: float, size: float, *, bold: bool = False) -> str:
    """Return as much of ``words`` as fits ``width`` pixels; an ellipsis tells what is cut.

    Examples
    --------
    >>> shortened("Skerry light", 500, 8), shortened("Skerry light", 50, 8)
    ('Skerry light', 'Skerr…')
    """
    whole = drawable(words)
    if text_width(whole, size, bold=bold) <= width:
        return whole
    fits, fails = 0, len(whole)
    while fails - fits > 1:
        middle = (fits + fails) // 2
        if text_width(f"{whole[:middle].rstrip()}…", size, bold=bold) <= width:
            fits = middle
        else:
            fails = middle
    return f"{whole[:fits].rstrip()}…"


def broken(
    words: str, width: float, size: float, *, most: int = 4, bold: bool = False
) -> list[str]:
    """Return ``words`` in lines that fit ``width`` pixels; the last of ``most`` lines is cut.

    A word that is longer than a line is broken where the line ends.

    Examples
    --------
    >>> broken("a limit that is not short", 80, 8)
    ['a limit that', 'is not short']
    """
    lines: list[str] = []
    left = drawable(words)
    while left and len(lines) < most - 1:
        end = _end_of_line(left, width, size, bold)
        lines.append(left[:end].rstrip())
        left = left[end:].lstrip()
    if left:
        lines.append(shortened(left, width, size, bold=bold))
    return lines


def _end_of_line(words: str, width: float, size: float, bold: bool) -> int:
    """Return how many letters of ``words`` stand on a line."""
    fits, fails = 1, len(words) + 1
    while fails - fits > 1:
        middle = (fits + fails) // 2
        if text_width(words[:middle].rstrip(), size, bold=bold) <= width:
            fits = middle
        else:
            fails = middle
    if fits == len(words) or words[fits] == " ":
        return fits
    return words.rfind(" ", 0, fits) + 1 or fits


@lru_cache(maxsize=1)
def _letters() -> frozenset[int]:
    """Code points that both cuts of the face have."""
    cuts = [get_font(findfont(FontProperties(weight=weight))) for weight in ("normal", "bold")]
    return frozenset.intersection(*(frozenset(cut.get_charmap()) for cut in cuts))
