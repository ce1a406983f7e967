"""Reference forecasts, climatology and persistence, and the skill over them."""

from __future__ import annotations

import numpy as np
import xarray as xr

from ensemble_horizon.checks import require_dimension
from ensemble_horizon.errors import ArgumentError
from ensemble_horizon.skill.alignment import aligned, at_valid_times
from ensemble_horizon.skill.averages import average
from ensemble_horizon.skill.crps import gaussian_crps
from ensemble_horizon.spread.places import Region
from ensemble_horizon.vocabulary import START, VALID


def climatology_crps(
    analysis: xr.DataArray, mean: xr.DataArray, deviation: xr.DataArray
) -> xr.DataArray:
    """CRPS of a forecast that is always the climatological distribution, taken as Gaussian.

    Parameters
    ----------
    analysis : DataArray (start, lead, *space), each dimension optional
    mean, deviation : DataArray
        Climatological mean and standard deviation on the dimensions of the analysis, with or
        without ``start`` and ``lead``; in its units. For climatological values as they are, use
        `crps` with these as members.

    Returns
    -------
    DataArray in the units of the analysis, lazy where the input is lazy. Where the standard
    deviation is zero, the absolute departure from the mean.

    Raises
    ------
    ArgumentError
        if a standard deviation is negative or all of them are zero, or the climatology is in other
        units or on another grid.

    Notes
    -----
    Closed form for a Gaussian: Gneiting et al. 2005, Monthly Weather Review (from memory).

    Examples
    --------
    >>> score = climatology_crps(xr.DataArray(5.0), xr.DataArray(5.0), xr.DataArray(2.0))
    >>> round(float(score), 4)  # 0.23370 standard deviations for an analysis in the middle
    0.4674
    """
    middle = aligned(analysis, mean, "mean", lasting=True)
    scale = aligned(analysis, deviation, "deviation", lasting=True)
    low, high = float(scale.min()), float(scale.max())
    if not (low >= 0 and high > 0):
        raise ArgumentError(
            "deviation",
            expected="climatological standard deviations of at least zero, some of them above",
            found="no value" if np.isnan(high) else f"values from {low:g} to {high:g}",
            remedy="give the standard deviation over many years, not that of one",
        )
    score = xr.apply_ufunc(
        gaussian_crps,
        analysis - middle,
        scale,
        join="override",
        dask="parallelized",
        output_dtypes=[np.result_type(analysis.dtype, scale.dtype, np.float32)],
    )
    return score.rename("climatology_crps").assign_attrs(
        long_name="continuous ranked probability score of the climatology",
        units=analysis.attrs.get("units", "1"),
    )


def persistence(forecast: xr.DataArray, analysis: xr.DataArray) -> xr.DataArray:
    """The analysis at each start, as a forecast for all leads.

    Parameters
    ----------
    forecast : DataArray (start, ...), whose starts are meant
    analysis : DataArray (valid, *space)

    Returns
    -------
    DataArray (start, *space). `rmse` and `bias` take it once it is broadcast to the leads; its CRPS
    is its absolute error. NaN where the series leaves a gap at a start.

    Raises
    ------
    ArgumentError
        if the series lacks the time of a start.

    Examples
    --------
    >>> times = np.array(["2024-01-05", "2024-01-06"], dtype="datetime64[ns]")
    >>> analysis = xr.DataArray([1.0, 2.0], dims="valid", coords={"valid": times})
    >>> forecast = xr.DataArray([0.0], dims="start", coords={"start": times[1:]})
    >>> persistence(forecast, analysis).values.tolist()
    [2.0]
    """
    require_dimension(analysis, VALID, "analysis")
    if START not in forecast.coords:
        raise ArgumentError(
            "forecast",
            expected=f"a coordinate {START} with date and time",
            found=f"coordinates {sorted(map(str, forecast.coords))}",
            remedy=f"attach it, for instance with .assign_coords({START}=...)",
        )
    found = at_valid_times(forecast[START], analysis, "analysis")
    return found.assign_coords({START: forecast[START]})


def skill_score(
    score: xr.DataArray,
    reference: xr.DataArray,
    *,
    over_starts: bool = True,
    region: Region | None = None,
    area: xr.DataArray | None = None,
) -> xr.DataArray:
    """Skill over a reference forecast: ``1 - mean(score) / mean(reference)``.

    Parameters
    ----------
    score, reference : DataArray (start, lead, *space), each dimension optional
        Scores that are zero for a perfect forecast, such as CRPS or squared error; the reference
        with or without ``start`` and ``lead``.
    over_starts, region, area
        What to average over, as in `bias`.

    Returns
    -------
    DataArray, units "1": 1 for a perfect forecast, 0 for one as good as the reference. Both means
    are over the starts and points that have both scores. NaN where the reference has no error.

    Raises
    ------
    ArgumentError
        if the two are in other units, on another grid or at other times.

    Examples
    --------
    >>> skill = skill_score(xr.DataArray([1.0, 2.0], dims="start"),
    ...                     xr.DataArray([2.0, 4.0], dims="start"))
    >>> float(skill)
    0.5
    """
    other = aligned(score, reference, "reference", lasting=True)
    both = np.isfinite(score) & np.isfinite(other)
    means = [
        average(item.where(both), over_starts=over_starts, region=region, area=area)
        for item in (score, other.broadcast_like(score))
    ]
    skill: xr.DataArray = 1 - means[0] / means[1].where(means[1] != 0)
    return skill.rename("skill_score").assign_attrs(long_name="skill score", units="1")
