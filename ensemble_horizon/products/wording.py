"""Plain words for horizons, leads and starts, the same in tables, figures and notes."""

from __future__ import annotations

from typing import Any

import numpy as np

from ensemble_horizon.vocabulary import Status

_SHORT_UNITS = {"hours": "h", "hour": "h", "h": "h", "days": "d", "day": "d", "1": "time units"}


def lead_units(units: str) -> str:
    """Return the short form of a lead unit.

    Examples
    --------
    >>> lead_units("hours"), lead_units("1")
    ('h', 'time units')
    """
    return _SHORT_UNITS.get(units, units)


def number(value: float) -> str:
    """Return ``value`` with at most three significant digits, whole numbers in full.

    Examples
    --------
    >>> number(54.0), number(53.6), number(3.217), number(1234.5)
    ('54', '53.6', '3.22', '1234')
    """
    if abs(value) >= 1000:
        return f"{value:.0f}"
    return f"{value:.3g}"


def lead_number(value: float, units: str) -> str:
    """Return a lead: hours rounded to whole ones, below ten to tenths; other leads in full.

    Examples
    --------
    >>> lead_number(54.4, "hours"), lead_number(9.88, "hours"), lead_number(3.217, "1")
    ('54', '9.9', '3.22')
    """
    if lead_units(units) != "h" or value < 1:
        return number(value)
    return f"{value:.0f}" if value >= 9.95 else f"{value:.1f}".removesuffix(".0")


def duration(value: float, units: str) -> str:
    """Return a lead or doubling time with its unit, or a dash where there is none.

    Examples
    --------
    >>> duration(54.4, "hours"), duration(float("nan"), "hours")
    ('54 h', '–')
    """
    if not np.isfinite(value):
        return "–"
    return f"{lead_number(value, units)} {lead_units(units)}"


def interval(low: float, high: float, units: str) -> str:
    """Return ``(47 to 63)``, open ends in words, or an empty text where there is none.

    Examples
    --------
    >>> interval(47, 63, "hours"), interval(47, float("inf"), "hours")
    ('(47 to 63)', '(47 to beyond the run)')
    """
    if not np.isfinite(low) and not np.isfinite(high):
        return ""
    lower = lead_number(low, units) if np.isfinite(low) else "the start"
    upper = lead_number(high, units) if np.isfinite(high) else "beyond the run"
    return f"({lower} to {upper})"


def horizon_text(
    status: int,
    horizon: float,
    low: float,
    high: float,
    projected: float,
    last_lead: float,
    units: str,
) -> str:
    """Return one horizon in plain words.

    Examples
    --------
    >>> nan = float("nan")
    >>> horizon_text(Status.reached, 54, 47, 63, nan, 240, "hours")
    '54 h (47 to 63)'
    >>> horizon_text(Status.beyond_run, nan, nan, float("inf"), 310, 240, "hours")
    'beyond the run (> 240 h; law projects 310 h)'
    """
    if status == Status.reached:
        return f"{duration(horizon, units)} {interval(low, high, units)}".strip()
    if status == Status.beyond_run:
        law = f"; law projects {duration(projected, units)}" if np.isfinite(projected) else ""
        return f"beyond the run (> {duration(last_lead, units)}{law})"
    if status == Status.at_start:
        lead = f" ({duration(horizon, units)})" if np.isfinite(horizon) and horizon > 0 else ""
        return f"exceeded at the first lead{lead}"
    if status == Status.no_growth:
        return "no growth, so no limit"
    return "too little data"


def iso_start(start: Any, label: str = "") -> str:
    """Return a start in ISO 8601 (UTC, without a zone); ``label`` for the pooled pseudo start.

    Examples
    --------
    >>> iso_start(np.datetime64("2031-01-05T00", "ns"))
    '2031-01-05T00:00:00'
    >>> iso_start(np.datetime64("NaT"), "all")
    'all'
    """
    if is_pooled(start, label):
        return label or "all"
    if isinstance(start, np.datetime64):
        return str(np.datetime_as_string(start, unit="s"))
    if hasattr(start, "strftime"):
        return (
            f"{start.year:04d}-{start.month:02d}-{start.day:02d}"
            f"T{start.hour:02d}:{start.minute:02d}:{start.second:02d}"
        )
    return label or str(start)


def start_text(start: Any, label: str = "") -> str:
    """Return a start as people read it: ``2031-01-05 00:00 UTC``, or the label where pooled."""
    text = iso_start(start, label)
    if "T" in text and text[:4].isdigit():
        return f"{text[:10]} {text[11:16]} UTC"
    return "all starts pooled" if text == "all" else text


def is_pooled(start: Any, label: str = "") -> bool:
    """Tell whether a start is the pseudo start that stands for all of them."""
    if label == "all" or start is None:
        return True
    if isinstance(start, np.datetime64):
        return bool(np.isnat(start))
    return isinstance(start, float) and bool(np.isnan(start))


def law_names(flags: Any) -> dict[int, str]:
    """Return the meaning of each flag value of a law variable (an xarray object with attrs)."""
    values = np.atleast_1d(flags.attrs.get("flag_values", []))
    meanings = str(flags.attrs.get("flag_meanings", "")).split()
    return {int(value): meaning for value, meaning in zip(values, meanings, strict=False)}
