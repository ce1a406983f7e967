"""The briefing set into the template of the page."""

from __future__ import annotations

from collections.abc import Sequence
from importlib import resources
from typing import Any

from jinja2 import Environment, FunctionLoader, StrictUndefined
from markupsafe import Markup

from ensemble_horizon.products.gains import summary_words, telling_first
from ensemble_horizon.products.limits import Limit
from ensemble_horizon.products.page.briefing import Briefing
from ensemble_horizon.products.page.clock import clock_of, moment_words
from ensemble_horizon.products.page.curve_plot import LEFT, RIGHT, WIDTH
from ensemble_horizon.products.page.curve_words import curve_groups
from ensemble_horizon.products.page.error_rows import middle_and_last, outcome
from ensemble_horizon.products.page.lanes import lane_chart
from ensemble_horizon.products.page.limit_rows import limit_tables
from ensemble_horizon.products.page.map_figure import map_part
from ensemble_horizon.products.page.naming import told_apart
from ensemble_horizon.products.page.policy import content_policy
from ensemble_horizon.products.score_sentences import of_place_first, two_digits
from ensemble_horizon.products.wording import crossing_words, duration
from ensemble_horizon.vocabulary import CAUTION

_PACKAGE = "ensemble_horizon.products.page"
_TEMPLATE, _STYLE, _SCRIPT = "page.html.j2", "page.css", "page.js"


def page_text(briefing: Briefing) -> str:
    """Return the page as HTML."""
    environment = Environment(
        loader=FunctionLoader(packaged),
        autoescape=True,
        undefined=StrictUndefined,
        trim_blocks=True,
        lstrip_blocks=True,
        keep_trailing_newline=True,
    )
    environment.filters["duration"] = duration
    environment.filters["two_digits"] = two_digits
    return environment.get_template(_TEMPLATE).render(_content(told_apart(briefing)))


def packaged(name: str) -> str:
    """Return a text that lies beside this module."""
    return (resources.files(_PACKAGE) / name).read_text(encoding="utf-8")


def _content(briefing: Briefing) -> dict[str, Any]:
    style, script = packaged(_STYLE), packaged(_SCRIPT)
    limits = briefing.limits()
    units = limits[0].horizon_units if limits else "hours"
    clock = clock_of(briefing.results[0].curves, units)
    maps = map_part(briefing.results, briefing.ground)
    versions = briefing.versions
    names = {limit.variable: limit.long_name for limit in limits}
    start = moment_words(clock.start) if clock.start else briefing.start
    first = next(iter(briefing.shortest_first()), None)
    here, there = of_place_first(
        briefing.skill, first.place if first else "", first.variable if first else ""
    )
    return {
        "briefing": briefing,
        "start": start,
        "made": moment_words(briefing.made),
        "policy": content_policy(style, script),
        # Ours to the letter: the digests in the policy are those of these texts.
        "style": Markup(style),
        "script": Markup(script),
        "chart": lane_chart(briefing, clock),
        "tables": list(limit_tables(briefing, clock)),
        "maps": maps,
        "grids": [(name, Markup(told)) for name, told in maps.grids],
        "readings": [Markup(figure.reading) for figure in maps.figures],
        "groups": list(curve_groups(briefing.results)),
        "plot": {"left": LEFT, "right": RIGHT, "width": WIDTH},
        "versions": versions,
        "gains": telling_first(versions.rows) if versions else [],
        "gains_words": summary_words(versions.rows) if versions else "",
        "errors": middle_and_last(versions.errors) if versions else [],
        "errors_words": outcome(versions.errors, versions.version_a, versions.version_b)
        if versions
        else "",
        "skill_here": here,
        "skill_there": there,
        "headline_place": first.place if first else "",
        "meaning": _meaning(limits)[0],
        "crossings": f"W{_meaning(limits)[1][1:]}",
        "names": names,
        "caution": CAUTION,
    }


def _meaning(limits: Sequence[Limit]) -> tuple[str, str]:
    """Say what a limit is, and where a curve has it; for how long where all variables agree."""
    holds = {(limit.hold, limit.horizon_units) for limit in limits}
    if len(holds) > 1:
        lasting = "for as long as the settings ask of the variable"
        return f"is first reached {lasting}", f"where the curve first reaches it {lasting}"
    return crossing_words(*next(iter(holds), (0.0, "hours")))
