"""Two versions against analyses: their scores by lead, compared start by start."""

from __future__ import annotations

import xarray as xr

from ensemble_horizon.skill.averages import average
from ensemble_horizon.skill.crps import crps
from ensemble_horizon.skill.departures import departure
from ensemble_horizon.spread.places import Region
from ensemble_horizon.versions.scores import compare_scores
from ensemble_horizon.vocabulary import MEMBER

_SUFFIXES = {
    "difference": "difference",
    "difference_low": "difference_low",
    "difference_high": "difference_high",
    "p_value": "p_value",
    "mean_a": "a",
    "mean_b": "b",
    "starts": "starts",
    "reason": "reason",
}


def compare_verified(
    a: xr.DataArray,
    b: xr.DataArray,
    analysis: xr.DataArray,
    *,
    region: Region | None = None,
    area: xr.DataArray | None = None,
    confidence: float = 0.9,
) -> xr.Dataset:
    """Differences by lead of the fair CRPS and of the squared error of the ensemble mean.

    Parameters
    ----------
    a, b : DataArray (start, lead, member, ...), on the same starts and leads
    analysis : DataArray, as in `crps`
    region, area : averages over a region, as in `average`

    Returns
    -------
    Dataset (lead, ...) with what `compare_scores` gives, each name with ``crps_`` or
    ``squared_error_`` before it; ``crps_a``, ``crps_b`` and so on for the means of both versions.
    The squared error of a mean of few members is larger for that alone, by their variance over
    their number in expectation; so that of the larger ensemble is given as for the mean of as many
    members as the smaller one has, ``e^2 - s^2/M + s^2/m``. The fair CRPS needs no such step.

    Notes
    -----
    Ferro 2014, Leutbecher 2019 (both Quarterly Journal of the Royal Meteorological Society), for
    members that are alike and independent given the start.

    Examples
    --------
    >>> import numpy as np
    >>> rng = np.random.default_rng(0)
    >>> coords = {"start": np.arange(20), "lead": [24.0, 48.0]}
    >>> analysis = xr.DataArray(np.zeros((20, 2)), dims=("start", "lead"), coords=coords)
    >>> old, new = (analysis + xr.DataArray(size * rng.standard_normal((20, 2, 9)),
    ...             dims=("start", "lead", "member")) for size in (1.0, 0.5))
    >>> found = compare_verified(old, new, analysis)
    >>> bool((found.crps_difference_high < 0).all())
    True
    """
    members = min(item.sizes[MEMBER] for item in (a, b))
    parts = {
        "crps": [crps(item, analysis) for item in (a, b)],
        "squared_error": [_squared_error(item, analysis, members) for item in (a, b)],
    }
    found = []
    for name, scores in parts.items():
        means = [
            average(item, over_starts=False, region=region, area=area).assign_attrs(item.attrs)
            for item in scores
        ]
        compared = compare_scores(means[0], means[1], confidence=confidence)
        found.append(
            compared.rename({key: f"{name}_{suffix}" for key, suffix in _SUFFIXES.items()})
        )
    return xr.merge(found, combine_attrs="override")


def _squared_error(ensemble: xr.DataArray, analysis: xr.DataArray, members: int) -> xr.DataArray:
    """Squared error of the mean, as it would be with so many members."""
    units = str(ensemble.attrs.get("units", "1"))
    square = departure(ensemble, analysis) ** 2
    count = ensemble.notnull().sum(MEMBER)
    variance = ensemble.where(count > 1).var(MEMBER, ddof=1)
    more = variance * (1 / members - 1 / count.where(count > 1))
    square = square + more.where(count != members, 0.0)
    square.attrs = {
        "long_name": f"squared error of the mean of {members} members",
        "units": "1" if units == "1" else f"({units})2",
    }
    return square
