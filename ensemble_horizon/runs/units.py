"""Converting units with UDUNITS.

A value and a difference convert differently where the units have another zero: 10 degC is 283.15 K,
but a spread of 10 degC is a spread of 10 K.
"""

from __future__ import annotations

import cf_units
import numpy as np

from ensemble_horizon.errors import InputError, SettingsError


def converter(from_units: str, to_units: str, what: str = "units") -> tuple[float, float]:
    """Scale and offset that turn values in ``from_units`` into values in ``to_units``.

    value_to = scale * value_from + offset. For differences (spread, error, tolerance) use
    `difference_scale`, which leaves the offset out.

    Parameters
    ----------
    from_units, to_units : str
        Units as UDUNITS understands them, such as "K", "m s-1", "hPa".
    what : str
        The variable or key for the message.

    Raises
    ------
    InputError
        If ``from_units`` (those of the file) are missing or unknown.
    SettingsError
        If ``to_units`` (those asked for) are unknown, or the two do not convert.

    Examples
    --------
    >>> converter("degC", "K")
    (1.0, 273.15)
    >>> converter("Pa", "hPa")
    (0.01, 0.0)
    """
    if from_units == to_units:
        return 1.0, 0.0
    if not from_units:
        raise InputError(
            what,
            expected=f"units that convert to {to_units!r}",
            found="no units in the file",
            remedy="add the units attribute to the file, or leave the units out of the settings",
        )
    source, target = _unit(from_units), _unit(to_units)
    if source is None:
        raise InputError(
            what,
            expected="units that UDUNITS knows",
            found=f"{from_units!r} in the file",
            remedy="correct the units attribute of the file",
        )
    if target is None:
        raise SettingsError(
            what,
            expected="units that UDUNITS knows",
            found=repr(to_units),
            remedy="correct the spelling, for instance 'm s-1'",
        )
    if not source.is_convertible(target):
        raise SettingsError(
            what,
            expected=f"units that {from_units!r} converts to",
            found=repr(to_units),
            remedy=f"name units of the same kind as {from_units!r}",
        )
    ends = np.array([0.0, 1.0, 2.0])
    zero, one, two = (float(value) for value in source.convert(ends, target))
    if not np.isclose(two - one, one - zero, rtol=1e-9, atol=1e-300):
        raise SettingsError(
            what,
            expected="units that differ by a factor and an offset",
            found=f"{from_units!r} and {to_units!r}, where one is logarithmic",
            remedy="convert the data beforehand",
        )
    return _clean(one - zero), _clean(zero)


def difference_scale(from_units: str, to_units: str, what: str = "units") -> float:
    """The factor that turns a difference in ``from_units`` into one in ``to_units``.

    Raises
    ------
    InputError, SettingsError
        As `converter`.

    Examples
    --------
    >>> difference_scale("degC", "K")
    1.0
    """
    return converter(from_units, to_units, what)[0]


def same_units(a: str, b: str) -> bool:
    """Whether two spellings mean the same units.

    Examples
    --------
    >>> same_units("m/s", "m s-1"), same_units("K", "degC")
    (True, False)
    """
    if a == b:
        return True
    first, second = _unit(a), _unit(b)
    return first is not None and second is not None and bool(first == second)


def _unit(text: str) -> cf_units.Unit | None:
    try:
        unit = cf_units.Unit(text)
    except ValueError:
        return None
    return None if unit.is_unknown() or unit.is_no_unit() else unit


def _clean(value: float) -> float:
    """Drop the last digits, where one - zero leaves rounding such as 1.0000000000000002."""
    return float(f"{value:.13g}")
