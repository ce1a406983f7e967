"""The briefing set into the template of the page."""

from __future__ import annotations

from collections import Counter
from dataclasses import replace
from importlib import resources
from typing import Any, NamedTuple

import xarray as xr
from jinja2 import Environment, FunctionLoader, StrictUndefined
from markupsafe import Markup

from ensemble_horizon.products.gains import summary_words, telling_first
from ensemble_horizon.products.page.briefing import Briefing
from ensemble_horizon.products.page.clock import clock_of, moment_words
from ensemble_horizon.products.page.curve_plot import LEFT, RIGHT, WIDTH
from ensemble_horizon.products.page.curve_words import curve_groups
from ensemble_horizon.products.page.lanes import lane_chart
from ensemble_horizon.products.page.limit_rows import limit_tables
from ensemble_horizon.products.page.map_figure import map_part
from ensemble_horizon.products.page.policy import content_policy
from ensemble_horizon.products.wording import duration
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
    return environment.get_template(_TEMPLATE).render(_content(told_apart(briefing)))


def told_apart(briefing: Briefing) -> Briefing:
    """Return the briefing with the name of the settings behind each long name that two share."""
    curves = [result.curves for result in briefing.results]
    shared = Counter(str(item.attrs.get("long_name", "")) for item in curves)
    if max(shared.values()) == 1:
        return briefing
    named = []
    for result in briefing.results:
        long_name = str(result.curves.attrs.get("long_name", ""))
        if shared[long_name] > 1:
            words = f"{long_name} ({result.curves.attrs.get('variable', 'variable')})".strip()
            maps = None if result.maps is None else result.maps.assign_attrs(long_name=words)
            named.append(_Named(result.curves.assign_attrs(long_name=words), maps))
        else:
            named.append(_Named(result.curves, result.maps))
    return replace(briefing, results=tuple(named))


class _Named(NamedTuple):
    curves: xr.Dataset
    maps: xr.Dataset | None


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
        "names": names,
        "caution": CAUTION,
    }
