"""What stands beside the curve on paper: its key, versions, past skill and notes."""

from __future__ import annotations

from collections.abc import Sequence

from matplotlib.lines import Line2D

from ensemble_horizon.products.curve_panel import (
    BAND,
    LAW_INK,
    Panel,
    colour_of,
    is_logarithmic,
)
from ensemble_horizon.products.fitted_text import broken
from ensemble_horizon.products.page.briefing import Briefing
from ensemble_horizon.products.paper import HEIGHT, MARGIN, WIDTH, Paper
from ensemble_horizon.products.score_sentences import of_place_first
from ensemble_horizon.products.sheet import INK, SOFT_INK, line_height
from ensemble_horizon.products.sheet_table import fitted_criterion
from ensemble_horizon.products.wording import interval_name, lead_units

_NOTES_LEFT = MARGIN + 498


def draw_notes(
    paper: Paper, briefing: Briefing, panel: Panel | None, top: float, foot: float
) -> None:
    """Write the key of the curve, and below it whatever sentences there is room for."""
    left = _NOTES_LEFT if panel else MARGIN
    room = WIDTH - MARGIN - left
    if panel:
        top = _key(paper, panel, left, top, room)
    versions = briefing.versions
    compared = [] if versions is None else [versions.balance()]
    for heading, sentences in (
        ("Versions", compared), ("Past skill", _skill(briefing)), ("Notes", briefing.notes),
    ):  # fmt: skip
        told = [broken(f"· {words}", room, 8, most=4) for words in sentences]
        fit = int((foot - top - line_height(9) - 4) // line_height(8))
        if not told or fit < 2:
            continue
        lines = _that_fit(told, fit)
        top = paper.lines(left, top, [heading], size=9, weight="bold")
        top = paper.lines(left, top, lines, size=8) + 8


def _that_fit(told: Sequence[Sequence[str]], fit: int) -> list[str]:
    """Return the lines of as many whole sentences as fit, and tell where there are more."""
    everything = [line for sentence in told for line in sentence]
    if len(everything) <= fit:
        return everything
    lines: list[str] = []
    for sentence in told:
        if len(lines) + len(sentence) > fit - 1:
            break
        lines += sentence
    return [*(lines or told[0][: fit - 1]), "and more on the page"]


def _skill(briefing: Briefing) -> list[str]:
    """Past skill of the place of the shortest limit, then of the others in short."""
    if not briefing.skill:
        return [briefing.no_skill] if briefing.no_skill else []
    first = next(iter(briefing.shortest_first()), None)
    place, variable = (first.place, first.variable) if first else ("", "")
    here, others = of_place_first(briefing.skill, place, variable)
    told = [text for item in here for text in item.sentences()]
    if not here:
        told = [f"Nothing is verified at {place}."]
    return told + [
        f"{item.where}, {item.long_name}: members part: {item.parting}; spread over error "
        f"{item.ratio} at {item.lead}"
        + (f"; {item.score} significant until {item.until}." if item.score else ".")
        for item in others
    ]


def _key(paper: Paper, panel: Panel, left: float, top: float, room: float) -> float:
    """Name the lines of the curve; return where the next thing stands."""
    title = broken(
        f"How fast the members part: {panel.limits[0].long_name}", room, 9, most=2, bold=True
    )
    top = paper.lines(left, top, title, size=9, weight="bold") + 2
    units = str(panel.curves.attrs.get("units", "1"))
    size = "" if units == "1" else f"spread in {units}, "
    steps = "equal steps up for equal ratios, " if is_logarithmic(panel.values("spread")) else ""
    words = f"{size}{steps}lead in {lead_units(panel.limits[0].horizon_units)}"
    top = paper.lines(left, top, broken(words, room, 8, most=2), size=8, colour=SOFT_INK) + 4
    band = f"its {interval_name(panel.curves.attrs.get('confidence')).lower()}"
    entries = [(["spread"], INK), ([band], BAND), (["fitted law"], LAW_INK)]
    entries += [
        (fitted_criterion(limit, room - 34, 8, most=2), colour_of(position))
        for position, limit in enumerate(panel.limits)
    ]
    for lines, colour in entries:
        y = 1 - (top + 7) / HEIGHT
        line = Line2D([left / WIDTH, (left + 26) / WIDTH], [y, y], color=colour)
        line.set(linewidth=7 if colour == BAND else 1.7, solid_capstyle="butt")
        line.set_linestyle((0, (4, 2)) if colour == LAW_INK else "-")
        paper.figure.add_artist(line)
        top = paper.lines(left + 34, top, lines, size=8) + 17 - line_height(8)
    lines = broken("Diamond and bar below: limit and interval.", room, 7.5, most=2)
    return paper.lines(left, top + 2, lines, size=7.5, colour=SOFT_INK) + 10
