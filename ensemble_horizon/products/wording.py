"""Plain words for horizons, leads and starts, the same in tables, figures and notes."""

from __future__ import annotations

from typing import Any

import numpy as np

from ensemble_horizon.vocabulary import Status

_SHARES = {0.25: "a quarter", 0.5: "half", 0.75: "three quarters"}
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


def signed(value: float, units: str) -> str:
    """Return a difference of leads with its sign: hours below ten to tenths, others in full.

    Examples
    --------
    >>> signed(7.24, "hours"), signed(-12.4, "hours"), signed(0.0, "hours"), signed(0.1234, "1")
    ('+7.2', '−12', '0', '+0.123')
    """
    hours = lead_units(units) == "h"
    size = abs(value)
    words = number(size) if not hours else f"{size:.0f}" if size >= 9.95 else f"{size:.1f}"
    words = words.removesuffix(".0") if hours else words
    return words if float(words) == 0 else f"{'+' if value > 0 else '−'}{words}"


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


def interval_name(confidence: float | None) -> str:
    """Return ``90 % interval`` or, where the confidence is not known, ``Interval``.

    Examples
    --------
    >>> interval_name(0.9), interval_name(None)
    ('90 % interval', 'Interval')
    """
    return "Interval" if confidence is None else f"{100 * float(confidence):.3g} % interval"


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
    >>> horizon_text(Status.beyond_run, nan, 112, float("inf"), nan, 240, "hours")
    'beyond the run (> 240 h; perhaps from 112 h)'
    """
    if status == Status.reached:
        return f"{duration(horizon, units)} {interval(low, high, units)}".strip()
    if status == Status.beyond_run:
        early = f"; perhaps from {duration(low, units)}" if np.isfinite(low) else ""
        law = f"; law projects {duration(projected, units)}" if np.isfinite(projected) else ""
        return f"beyond the run (> {duration(last_lead, units)}{law}{early})"
    if status == Status.at_start:
        lead = f" ({duration(horizon, units)})" if np.isfinite(horizon) and horizon > 0 else ""
        return f"reached at the first lead{lead}"
    if status == Status.no_growth:
        return "no growth, so no limit"
    return "too little known"


def iso_start(start: Any, label: str = "") -> str:
    """Return a start in ISO 8601 (UTC, without a zone); ``label`` for the pooled pseudo start.

    Examples
    --------
    >>> iso_start(np.datetime64("2031-01-05T00", "ns"))
    '2031-01-05T00:00:00'
    >>> iso_start(np.datetime64("NaT", "ns"), "all")
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
    """Return the law behind each flag value of a law variable (an xarray object with attrs).

    CF flag meanings may be written with underscores where the names of laws have hyphens; ``none``
    is an empty name.
    """
    values = np.atleast_1d(flags.attrs.get("flag_values", []))
    meanings = str(flags.attrs.get("flag_meanings", "")).split()
    return {
        int(value): "" if meaning == "none" else meaning.replace("_", "-")
        for value, meaning in zip(values, meanings, strict=False)
    }


def with_units(words: str, units: str) -> str:
    """Return ``words`` with ``units`` behind them, if they end in a number.

    Examples
    --------
    >>> with_units("tolerance 5", "m s-1"), with_units("gale", "m s-1")
    ('tolerance 5 m s-1', 'gale')
    """
    if not _is_number(words.split()[-1] if words.split() else ""):
        return words
    return words if units in ("", "1") else f"{words} {units}"


def _is_number(word: str) -> bool:
    try:
        float(word)
    except ValueError:
        return False
    return True


def criterion_words(criterion: str, threshold: float, units: str) -> str:
    """Return a criterion with its threshold, unless its name says the number already.

    Examples
    --------
    >>> criterion_words("gale", 5.0, "m s-1"), criterion_words("tolerance 5", 5.0, "m s-1")
    ('gale (5 m s-1)', 'tolerance 5 m s-1')
    >>> criterion_words("chance 0.3 beyond 17", 0.3, "1")
    'chance 0.3 beyond 17'
    """
    if not np.isfinite(threshold):
        return criterion
    value, unit = number(threshold), "" if units in ("", "1") else f" {units}"
    if criterion.split()[-1:] == [value]:
        return f"{criterion}{unit}"
    return criterion if value in criterion.split() else f"{criterion} ({value}{unit})"


def rule_words(rule: str, units: str) -> str:
    """Return what the rule of a criterion asks for, with units; nothing if it tells no size.

    ``rule`` is the label that a criterion has without a name, ``units`` those of the variable.

    Examples
    --------
    >>> rule_words("chance 0.25 beyond 4", "m s-1"), rule_words("tolerance 5", "m s-1")
    ('a quarter of members more than 4 m s-1 from the median', '5 m s-1')
    >>> rule_words("chance 0.3 beyond 17", "1"), rule_words("climatology fraction 0.5", "m s-1")
    ('30 % of members more than 17 from the median', '')
    """
    unit = "" if units in ("", "1") else f" {units}"
    match rule.split():
        case ["tolerance", size]:
            return f"{size}{unit}"
        case ["chance", share, "beyond", size] if _is_number(share):
            part = _SHARES.get(float(share), f"{100 * float(share):.3g} %")
            return f"{part} of members more than {size}{unit} from the median"
    return ""


def crossing_words(hold: float, units: str) -> tuple[str, str]:
    """Return what a limit is, and where a curve has it, given how long a crossing must last.

    Examples
    --------
    >>> crossing_words(0, "hours")
    ('is first reached', 'where the curve first reaches it')
    >>> crossing_words(12, "hours")[1]
    'where the curve first reaches it for at least 12 h'
    """
    lasting = f" for at least {duration(hold, units)}" if hold > 0 else ""
    return f"is first reached{lasting}", f"where the curve first reaches it{lasting}"
