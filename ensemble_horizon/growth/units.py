"""Units of what a fit yields, from those of the curve and of the lead times.

Spelt the UDUNITS way that the CF conventions ask for (CF-1.11, section 3.1).
"""

from __future__ import annotations

SINGULAR = {
    "seconds": "second",
    "minutes": "minute",
    "hours": "hour",
    "days": "day",
    "weeks": "week",
}


def power_of(units: str, exponent: int) -> str:
    """``units`` to an integer power.

    Examples
    --------
    >>> power_of("hours", -1), power_of("m s-1", 2), power_of("K", 2), power_of("1", -1)
    ('hour-1', '(m s-1)^2', 'K2', '1')
    """
    plain = SINGULAR.get(units, units)
    if plain in ("1", ""):
        return "1"
    if plain.isalpha():
        return f"{plain}{exponent}"
    return f"({plain})^{exponent}"


def product_of(*units: str) -> str:
    """Product of units.

    Examples
    --------
    >>> product_of("K2", "hour-1"), product_of("1", "hour-1")
    ('K2 hour-1', 'hour-1')
    """
    factors = [unit for unit in units if unit not in ("1", "")]
    return " ".join(factors) if factors else "1"
