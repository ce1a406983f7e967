"""Tonight against what is usual, in words."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

from ensemble_horizon.products.wording import interval, lead_number, lead_units

if TYPE_CHECKING:
    from ensemble_horizon.horizon.usual import Usual

_WORDS = {
    "shorter": "shorter than usual",
    "longer": "longer than usual",
    "usual": "as usual",
    "unknown": "usual not known",
}


def standing_name(usual: Usual | None) -> str:
    """Return ``shorter``, ``longer``, ``usual`` or ``unknown``."""
    return "unknown" if usual is None else usual.standing.name


def standing_words(usual: Usual | None) -> str:
    """Return the standing as people say it: ``shorter than usual``."""
    return _WORDS[standing_name(usual)]


def percentile_words(usual: Usual | None, *, short: bool = False) -> str:
    """Return ``percentile 6 of 30 nights``, bounds where only they are known, else nothing.

    ``short`` leaves the number of nights out.
    """
    if usual is None or standing_name(usual) == "unknown":
        return ""
    low, high = usual.percentile, usual.percentile
    if np.isnan(low):
        low, high = usual.percentile_bounds
    if np.isnan(low):
        return ""
    ends = f"{low:.0f}" if round(low) == round(high) else f"{low:.0f} to {high:.0f}"
    if short:
        return f"percentile {ends}"
    season = " at this time of year" if usual.season else ""
    return f"percentile {ends} of {usual.nights} nights{season}"


def usual_words(usual: Usual | None, units: str) -> str:
    """Return median and range of the past nights: ``120 h (98 to beyond the run)``, or a dash."""
    if usual is None or np.isnan(usual.median):
        return "–"
    if np.isinf(usual.median):
        median = "beyond the run"
    else:
        median = f"{lead_number(usual.median, units)} {lead_units(units)}"
    return f"{median} {interval(usual.low, usual.high, units)}".strip()
