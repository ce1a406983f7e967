"""Lead at which a score falls to a chosen value, and at which it stops being significantly above.

At every lead the score has an interval over starts (`score_interval`). Where the score itself falls
to the value is the horizon. Where the lower end of its interval does is the lead up to which the
skill is significant: the first one at which a one-sided test at half the complement of the
confidence no longer finds it above. Leads are tested in their order and the first failure ends the
claim, so that the chance of claiming any lead too many is that of a single test, however many leads
there are (a fixed sequence of tests; Maurer, Hothorn and Lehmacher 1995, from memory). More starts
make the significant lead later, and the horizon only more certain.

The ends of the horizon's interval are where the two ends of the score's interval fall to the value:
the inversion of the band at each lead, exact where neighbouring leads share their noise.

A lead without a score, as where no analysis was there, is not stepped over in silence. Where the
score lies above the value on both sides of such a gap it is taken to have stayed there, as between
any two leads. Where it falls across the gap, nothing tells at which lead: the horizon is
interpolated, but its interval reaches over the whole gap, the claim of significance ends at the
last lead before it, and ``gap`` says how wide it is. Beyond the last lead that has a score nothing
is stated.
"""

from __future__ import annotations

from typing import Any, NamedTuple

import numpy as np
import xarray as xr

from ensemble_horizon.checks import (
    require_choice,
    require_dimension,
    require_increasing,
    require_positive,
)
from ensemble_horizon.errors import ArgumentError
from ensemble_horizon.horizon.crossing import Crossing, first_crossing
from ensemble_horizon.skill import score_interval
from ensemble_horizon.vocabulary import LEAD, START, STATUS_ATTRIBUTES, Status

# Skill over the reference; useful maps (common practice).
USUAL = {"skill": 0.0, "correlation": 0.6}


def skill_limits(
    *scores: xr.DataArray,
    statistic: str = "skill",
    above: float | None = None,
    hold: float = 0.0,
    confidence: float = 0.9,
) -> xr.Dataset:
    """Lead at which a skill score falls to a value, or the anomaly correlation to 0.6.

    Parameters
    ----------
    *scores : DataArray (start, lead, ...)
        For ``skill`` a score and that of the reference; for ``correlation`` the three variables of
        `anomaly_products`.
    statistic : ``"skill"`` or ``"correlation"``
    above : float
        0 for skill and 0.6 for correlation where none is given.
    hold : float, in lead units
        A fall counts only if the score stays down for this long. It makes the claim of significance
        bolder than its level: a lead at which nothing is significant may be passed over.
    confidence : float
        Of the intervals, between ten starts or more.

    Returns
    -------
    Dataset without ``start`` and ``lead``:

    - ``horizon`` in lead units, where the score over all starts falls to ``above``, with
      ``status``; a number only where the status is ``reached``;
    - ``low``, ``high``: its interval; infinite beyond the run, the first lead where it is met
      there, NaN where there are too few starts, at the last leads too;
    - ``gap`` in lead units, between the two leads about the horizon that have a score, where leads
      between them have none; NaN where there is no such gap. The interval reaches over it;
    - ``significant_until``, where the lower end of the score's interval falls to ``above``, with
      ``significant_status``: ``at_start`` where the score is not significantly above it even at the
      first lead, ``no_data`` where it did not fall but the last lead could not be judged.

    Raises
    ------
    ArgumentError
        if the statistic is another, leads do not increase, or as in `score_interval`.

    Notes
    -----
    What "significantly above" means for many leads stands at the top of
    `ensemble_horizon.horizon.skill_limits`.

    Examples
    --------
    >>> rng = np.random.default_rng(0)
    >>> lead = xr.DataArray(24.0 * np.arange(1, 9), dims="lead", attrs={"units": "hours"})
    >>> size = xr.DataArray(0.2 * np.arange(1, 9), dims="lead", coords={"lead": lead})
    >>> noise = xr.DataArray(rng.gamma(50, 1 / 50, (40, 8)), dims=("start", "lead"))
    >>> found = skill_limits(noise * size, xr.ones_like(noise * size))
    >>> bool(abs(found.horizon - 120) < 6), bool(found.low < found.horizon)
    (True, True)
    """
    require_choice(statistic, USUAL, "statistic")
    require_positive(hold, "hold", zero=True)
    level = USUAL[statistic] if above is None else float(above)
    if not level < 1:
        raise ArgumentError(
            "above",
            expected="a value below 1, the score of a perfect forecast",
            found=repr(above),
            remedy="correct the value",
        )
    for score in scores:
        require_dimension(score, START, "scores")
    found = score_interval(*scores, statistic=statistic, confidence=confidence)
    if LEAD not in found.coords or LEAD not in found["value"].dims:
        raise ArgumentError(
            "scores",
            expected="a lead dimension with its coordinate",
            found=f"dimensions {tuple(map(str, found['value'].dims))} without start",
            remedy=f"give scores by lead, for instance with .assign_coords({LEAD}=...)",
        )
    lead = require_increasing(found[LEAD].values, f"scores[{LEAD!r}]")
    rest = [name for name in found["value"].dims if name != LEAD]
    shape = tuple(found.sizes[name] for name in rest)
    curves = [
        found[name].transpose(LEAD, *rest).values.reshape(lead.size, -1)
        for name in ("value", "low", "high")
    ]
    falls = falls_of_curves(lead, *curves, level=level, hold=hold)
    return _labelled(falls, found, lead, rest, shape, level)


class Falls(NamedTuple):
    """Where K curves of scores fall to a level, each (K,); see `skill_limits`."""

    horizon: np.ndarray
    low: np.ndarray
    high: np.ndarray
    status: np.ndarray
    significant_until: np.ndarray
    significant_status: np.ndarray
    gap: np.ndarray


def falls_of_curves(
    lead: np.ndarray,
    value: np.ndarray,
    low: np.ndarray,
    high: np.ndarray,
    *,
    level: float,
    hold: float = 0.0,
) -> Falls:
    """Where scores (L, K) with the ends of their intervals fall to a level: numpy kernel.

    Examples
    --------
    >>> value = np.array([[0.8], [0.4], [0.0]])
    >>> found = falls_of_curves(np.arange(3.0), value, value - 0.1, value + 0.1, level=0.1)
    >>> found.horizon.tolist(), found.significant_until.tolist()
    ([1.75], [1.5])
    """
    middle, lower, upper = (_fall(lead, curve, level, hold) for curve in (value, low, high))
    # A curve that is unknown at the last lead says nothing of what lies beyond the run.
    known, low_known, high_known = (np.isfinite(curve[-1]) for curve in (value, low, high))
    before, after = _gap(lead, value, middle.time)
    significant = _or(_gap(lead, low, lower.time)[0], lower.time)
    latest = _or(_gap(lead, high, upper.time)[1], upper.time)
    low_end = _end(lower, significant, low_known)
    high_end = _end(upper, latest, high_known)
    return Falls(
        middle.time,
        np.where(np.isfinite(before), np.minimum(low_end, before), low_end),
        np.where(np.isfinite(after), np.maximum(high_end, after), high_end),
        _status(middle, known), significant, _status(lower, low_known), after - before,
    )  # fmt: skip


def _gap(lead: np.ndarray, values: np.ndarray, time: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """Leads (K,) with a value before and after a fall where one between has none, else NaN."""
    known = np.isfinite(values)
    position = np.arange(lead.size)[:, np.newaxis]
    earlier = known & (lead[:, np.newaxis] < time)
    later = known & (lead[:, np.newaxis] >= time)
    before = np.where(earlier, position, -1).max(axis=0)
    after = np.where(later, position, lead.size).min(axis=0)
    open_ = (before >= 0) & (after < lead.size) & (after - before > 1)
    return (
        np.where(open_, lead[np.maximum(before, 0)], np.nan),
        np.where(open_, lead[np.minimum(after, lead.size - 1)], np.nan),
    )


def _or(values: np.ndarray, others: np.ndarray) -> np.ndarray:
    return np.where(np.isfinite(values), values, others)


def _fall(lead: np.ndarray, values: np.ndarray, level: float, hold: float) -> Crossing:
    """Where curves (L, K) fall to a level for good: a crossing turned upside down."""
    return first_crossing(lead, -values, -level, hold)


def _status(crossing: Crossing, known: np.ndarray) -> np.ndarray:
    open_end = np.where(known, Status.beyond_run, Status.no_data)
    status = np.where(np.isfinite(crossing.time), Status.reached, open_end)
    status = np.where(crossing.at_start, Status.at_start, status)
    return np.where(crossing.points == 0, Status.no_data, status).astype(np.int8)


def _end(crossing: Crossing, time: np.ndarray, known: np.ndarray) -> np.ndarray:
    time = np.where(crossing.at_start, crossing.first, time)
    return np.where(known & np.isnan(time), np.inf, time)


def _labelled(
    falls: Falls,
    found: xr.Dataset,
    lead: np.ndarray,
    rest: list[Any],
    shape: tuple[int, ...],
    level: float,
) -> xr.Dataset:
    units = found[LEAD].attrs.get("units", "1")
    what = f"{found['value'].attrs['long_name']} falls to {level:g}"
    times = {
        "horizon": (falls.horizon, f"lead at which the {what}"),
        "low": (falls.low, f"lower end of the interval of the lead at which the {what}"),
        "high": (falls.high, f"upper end of the interval of the lead at which the {what}"),
        "significant_until": (
            falls.significant_until,
            f"lead at which the lower end of the interval of the {what}",
        ),
        "gap": (falls.gap, f"time without a score within which the {what}"),
    }
    data: dict[str, Any] = {
        name: (rest, values.reshape(shape), {"long_name": text, "units": units})
        for name, (values, text) in times.items()
    }
    for name in ("status", "significant_status"):
        data[name] = (rest, getattr(falls, name).reshape(shape), dict(STATUS_ATTRIBUTES))
    coords = {name: item for name, item in found.coords.items() if LEAD not in item.dims}
    attributes = {"statistic": found.attrs["statistic"], "above": level, "last_lead": lead[-1]}
    return xr.Dataset(data, coords=coords, attrs=attributes)
