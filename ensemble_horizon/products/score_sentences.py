"""What past scores say of a variable, in one or two plain sentences."""

from __future__ import annotations

import numpy as np
import xarray as xr

from ensemble_horizon.products.scores import ScoredVariable, SkillLimit, skill_limits
from ensemble_horizon.products.wording import duration, number
from ensemble_horizon.vocabulary import LEAD, PLACE, SCORE, Status

_RATIO = "spread_error_ratio"
# The limit that is told is the first of these that is known.
_TOLD = ("skill_climatology", "skill_persistence", "anomaly_correlation")


def skill_sentences(result: ScoredVariable) -> tuple[str, ...]:
    """Tell how spread and error compared in the middle of the run, and where skill ended.

    Both for the first place of which there is a ratio of spread to error: a region before a site,
    an analysis before an observation, as the settings name them. Nothing where there is none.
    """
    data = result.places
    if _RATIO not in data[SCORE].values:
        return ()
    ratio = data[["value", "low", "high", "starts"]].sel({SCORE: _RATIO}).transpose(PLACE, LEAD)
    known = np.isfinite(ratio["value"].values)
    rows = np.flatnonzero(known.any(axis=1))
    if not rows.size:
        return ()
    row = int(rows[0])
    lead = data[LEAD].values
    there = np.flatnonzero(known[row])
    position = int(there[np.argmin(np.abs(lead[there] - lead[-1] / 2))])
    one = ratio.isel({PLACE: row, LEAD: position})
    place, against = str(one[PLACE].values), str(one["against"].values)
    limits = [limit for limit in skill_limits([result]) if (limit.place, limit.against) ==
              (place, against)]  # fmt: skip
    where = place if against == "analysis" else f"{place}, by its observations"
    name = str(data.attrs["long_name"])
    told = [_spread(one, str(data.attrs["lead_units"])), *_ends(limits)]
    return tuple(f"{name}: {text} for {where}." for text in told)


def _spread(one: xr.Dataset, units: str) -> str:
    starts = int(one["starts"])
    value, low, high = (float(one[name]) for name in ("value", "low", "high"))
    ends = "too few starts for an interval"
    if np.isfinite([low, high]).all():
        ends = f"{number(low)} to {number(high)}"
    span = f"the last {starts} verified starts" if starts > 1 else "the last verified start"
    when = duration(float(one[LEAD]), units)
    return f"over {span} the spread was {number(value)} ({ends}) of the error of the mean at {when}"


def _ends(limits: list[SkillLimit]) -> list[str]:
    """Where the first score that is known falls to its level; nothing where none is known."""
    known = {limit.score: limit for limit in limits if limit.status != Status.no_data}
    for name in _TOLD:
        if name in known:
            return [_end(known[name])]
    return []


def _end(limit: SkillLimit) -> str:
    level = "" if limit.level == 0 else f" above {limit.level:g}"
    if limit.status == Status.at_start:
        return f"there was no {limit.text}{level} even at the first lead"
    if limit.status == Status.beyond_run:
        return f"{limit.text}{level} lasted {limit.words}"
    return f"{limit.text}{level} ended at {limit.words}"
