"""Anomaly correlation of forecast and analysis."""

from __future__ import annotations

from typing import Any

import numpy as np
import xarray as xr

from ensemble_horizon.checks import require_dimension
from ensemble_horizon.skill.alignment import aligned
from ensemble_horizon.skill.averages import average
from ensemble_horizon.skill.departures import departure
from ensemble_horizon.spread.places import Region
from ensemble_horizon.vocabulary import LATITUDE, LONGITUDE, START

PRODUCTS = ("product", "forecast_squared", "analysis_squared")


def anomaly_correlation(
    forecast: xr.DataArray,
    analysis: xr.DataArray,
    climatology: xr.DataArray,
    *,
    member: Any = None,
    centred: bool = False,
    over_starts: bool = False,
    region: Region | None = None,
    area: xr.DataArray | None = None,
) -> xr.DataArray:
    """Correlation of the anomalies of forecast and analysis from the climatology.

    Parameters
    ----------
    forecast : DataArray (start, lead, member, *space), each dimension optional
        An ensemble, whose mean is taken, or a single forecast.
    analysis : DataArray on the dimensions of the forecast without ``member``, or on ``valid``
    climatology : DataArray
        Likewise, or without ``start`` and ``lead``.
    member : label of a member, optional
        The member to take instead of the mean.
    centred : bool
        Whether the area mean of each field of anomalies (without space, the mean over starts) is
        taken away first. The uncentred one also rewards a right area mean.
    over_starts : bool
        Pool all starts: their products are averaged before they are divided. Otherwise each start
        has its own correlation.
    region : Region, optional
        The whole field where none is given.
    area : DataArray (*space), optional
        Cell areas; cos(latitude) where none are given.

    Returns
    -------
    DataArray (start, lead), or (lead) where starts are pooled, units "1":
    ``sum w f' a' / sqrt(sum w f'^2 sum w a'^2)``. NaN where one of the two has no anomalies. Lazy
    where the input is lazy.

    Raises
    ------
    ArgumentError
        if there is neither space nor pooling over starts, no such member, or analysis or
        climatology are in other units, on another grid or at other times.

    Notes
    -----
    Definitions of the standard verification of the WMO Manual on the Global Data-processing and
    Forecasting System, WMO-No. 485 (from memory). 0.6 is the usual limit of a useful map forecast
    (common practice). A correlation over starts at one place, or an uncentred one with a
    climatology from the same years, is not to be compared with those of maps.

    Examples
    --------
    >>> forecast = xr.DataArray([[1.0, -1.0, 2.0]], dims=("start", "cell"),
    ...     coords={"latitude": ("cell", [0.0, 0.0, 0.0]), "longitude": ("cell", [0.0, 1.0, 2.0])})
    >>> found = anomaly_correlation(forecast, 2 * forecast, xr.zeros_like(forecast[0]))
    >>> found.values.round(6).tolist()
    [1.0]
    """
    parts = anomaly_products(
        forecast, analysis, climatology, member=member, centred=centred, region=region, area=area
    )
    spaceless = not {LATITUDE, LONGITUDE} <= set(forecast.coords)
    if over_starts or spaceless:
        require_dimension(forecast, START, "forecast")
        parts = parts.mean(START)
    product, ours, theirs = (parts[name] for name in PRODUCTS)
    found: xr.DataArray = product / (ours * theirs) ** 0.5
    varying = (ours > 0) & (theirs > 0)
    kind = "centred" if centred else "uncentred"
    return (
        found.where(varying)
        .clip(-1, 1)
        .rename("anomaly_correlation")
        .assign_attrs(long_name=f"anomaly correlation, {kind}", units="1")
    )


def anomaly_products(
    forecast: xr.DataArray,
    analysis: xr.DataArray,
    climatology: xr.DataArray,
    *,
    member: Any = None,
    centred: bool = False,
    region: Region | None = None,
    area: xr.DataArray | None = None,
) -> xr.Dataset:
    """Mean products of anomalies over space, start by start, of which the correlation is made.

    Parameters, and errors raised, as in `anomaly_correlation`. `score_interval` and `skill_limits`
    take the three variables in their order.

    Returns
    -------
    Dataset with ``product`` of forecast and analysis anomalies, ``forecast_squared`` and
    ``analysis_squared``, over the same points.

    Examples
    --------
    >>> forecast = xr.DataArray([1.0, 3.0], dims="start")
    >>> found = anomaly_products(forecast, 2 * forecast, xr.DataArray(0.0))
    >>> found["product"].values.tolist(), found.analysis_squared.values.tolist()
    ([2.0, 18.0], [4.0, 36.0])
    """
    usual = aligned(forecast, climatology, "climatology", lasting=True)
    truth = aligned(forecast, analysis) - usual
    ours = departure(forecast, analysis, member) + truth
    truth = truth.where(np.isfinite(ours))
    located = {LATITUDE, LONGITUDE} <= set(forecast.coords)
    where = region or (Region("domain") if located else None)

    def mean(field: xr.DataArray, over_starts: bool = False) -> xr.DataArray:
        return average(field, over_starts=over_starts, region=where, area=area)

    if centred:
        ours, truth = (part - mean(part, over_starts=where is None) for part in (ours, truth))
    products = (ours * truth, ours**2, truth**2)
    return xr.Dataset({name: mean(field) for name, field in zip(PRODUCTS, products, strict=True)})
