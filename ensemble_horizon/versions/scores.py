"""Differences of scores of two versions on the same starts."""

from __future__ import annotations

import xarray as xr

from ensemble_horizon.checks import require_fraction
from ensemble_horizon.errors import ArgumentError
from ensemble_horizon.versions.differences import mean_difference
from ensemble_horizon.versions.pairing import pair
from ensemble_horizon.vocabulary import START


def compare_scores(
    a: xr.DataArray, b: xr.DataArray, *, dim: str = START, confidence: float = 0.9
) -> xr.Dataset:
    """Difference of a score between version b and version a, by lead and point.

    Parameters
    ----------
    a, b : DataArray (start, lead, ...)
        A score of every start, such as the CRPS or a squared error, which must be a mean over
        members, points or neither, not a root of one: roots are taken after the mean over starts.
    confidence : float
        Of the intervals, each for its own lead and point.

    Returns
    -------
    Dataset without ``start``, on the common leads: ``difference`` (mean of b - a over the starts at
    which both have a value), ``difference_low``, ``difference_high``, ``p_value`` (two-sided),
    ``mean_a``, ``mean_b``, ``starts``, ``reason``. For scores that are better when smaller,
    such as the CRPS, b is better where the difference is below zero. The attributes
    ``starts_only_in_a`` and ``starts_only_in_b`` name what was left out.

    Raises
    ------
    ArgumentError
        if a start stands there twice, no start or lead is shared, points or units differ.

    Notes
    -----
    Diebold and Mariano 1995 (Journal of Business and Economic Statistics) for the idea; interval
    and p-value of `ensemble_horizon.serial.serial_mean`. Leads beyond one start interval verify
    the same days again and again; the dependence that this brings is in the starts and taken in.

    Examples
    --------
    >>> import numpy as np
    >>> rng = np.random.default_rng(0)
    >>> old = xr.DataArray(rng.gamma(2.0, size=(40, 2)), dims=("start", "lead"),
    ...                    coords={"start": np.arange(40), "lead": [24.0, 48.0]})
    >>> found = compare_scores(old, old - 0.3 * rng.random((40, 2)))
    >>> bool((found.difference_high < 0).all()), found.starts.values.tolist()
    (True, [40, 40])
    """
    require_fraction(confidence, "confidence")
    units = [data.attrs.get("units") for data in (a, b)]
    if None not in units and units[0] != units[1]:
        raise ArgumentError(
            "a and b",
            expected="scores in the same units",
            found=f"a: {units[0]}; b: {units[1]}",
            remedy="convert one of them",
        )
    paired = pair(a, b, dim)
    name = a.attrs.get("long_name", a.name if a.name is not None else "score")
    text = f"{name}: difference of version b from version a"
    found = mean_difference(paired.a, paired.b, dim, confidence, "difference", text)
    return found.assign_attrs(paired.attributes())
