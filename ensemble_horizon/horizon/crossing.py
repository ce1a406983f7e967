"""First lasting crossing of a threshold by a curve: numpy kernel."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

# A hold that ends on a lead to within rounding has been held.
_ROUNDING = 1e-9


@dataclass(frozen=True)
class Crossing:
    """Where N curves first reach their threshold, and stay there for as long as it takes to count.

    Parameters
    ----------
    time : (N,) lead of the crossing, NaN where there is none
    at_start : (N,) bool, reached at the first lead that has a value; ``time`` is NaN there
    points : (N,) int, leads that have a value
    first : (N,) the first of those leads, NaN where there is none
    """

    time: np.ndarray
    at_start: np.ndarray
    points: np.ndarray
    first: np.ndarray


def first_crossing(
    lead: np.ndarray,
    curves: np.ndarray,
    threshold: np.ndarray | float,
    hold: float = 0.0,
    *,
    geometric: bool = False,
) -> Crossing:
    """First crossing that lasts.

    Parameters
    ----------
    lead : (L,) increasing
    curves : (L, N), NaN where there is no value
    threshold : scalar or (N,), in the units of the curves
    hold : float, in the units of ``lead``
        The curve must stay at or above the threshold for this long after the crossing. A crossing
        that the run ends on before it has lasted is not counted: the run cannot show that it lasts.
    geometric : bool
        Interpolate the logarithm of the curve instead of the curve.

    Notes
    -----
    The crossing is placed by linear interpolation between the two leads about it; leads without a
    value are passed over.

    Examples
    --------
    >>> crossing = first_crossing(np.array([0.0, 6.0, 12.0]), np.array([[0.0], [1.0], [3.0]]), 2.0)
    >>> float(crossing.time[0])
    9.0
    """
    number = curves.shape[1]
    level = np.broadcast_to(np.asarray(threshold, dtype=float), (number,))
    previous_lead = np.full(number, np.nan)
    first = np.full(number, np.nan)
    previous = np.full(number, np.nan)
    candidate = np.full(number, np.nan)
    time = np.full(number, np.nan)
    active = np.zeros(number, dtype=bool)
    from_start = np.zeros(number, dtype=bool)
    done = np.zeros(number, dtype=bool)
    points = np.zeros(number, dtype=int)
    with np.errstate(invalid="ignore", divide="ignore"):
        for moment, row in zip(lead, curves, strict=True):
            known = np.isfinite(row)
            up = known & (row >= level)
            opens = up & ~active & ~done
            if opens.any():
                share = (level - previous) / (row - previous)
                if geometric:
                    positive = previous > 0
                    share = np.where(
                        positive, np.log(level / previous) / np.log(row / previous), share
                    )
                step = share * (moment - previous_lead)
                # Rounding must not place a crossing beyond the lead that shows it.
                begun = np.where(points == 0, moment, np.minimum(previous_lead + step, moment))
                candidate = np.where(opens, begun, candidate)
                from_start = np.where(opens, points == 0, from_start)
            active = np.where(known, up, active)
            lasts = (
                active & ~done & known & (moment >= candidate + hold - _ROUNDING * (1 + abs(hold)))
            )
            time = np.where(lasts, candidate, time)
            done |= lasts
            previous = np.where(known, row, previous)
            previous_lead = np.where(known, moment, previous_lead)
            first = np.where(known & (points == 0), moment, first)
            points += known
    at_start = done & from_start
    return Crossing(np.where(at_start, np.nan, time), at_start, points, first)
