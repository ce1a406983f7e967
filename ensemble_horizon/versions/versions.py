"""Two versions of a model, from their ensembles or their horizons to the hours gained."""

from __future__ import annotations

import numpy as np
import xarray as xr

from ensemble_horizon.checks import require_dimension
from ensemble_horizon.errors import ArgumentError
from ensemble_horizon.horizon.criteria import criterion_from
from ensemble_horizon.horizon.horizon import horizon
from ensemble_horizon.spread.curves import area_curve
from ensemble_horizon.spread.places import Region
from ensemble_horizon.spread.spread import exceedance, spread
from ensemble_horizon.versions.horizons import compare_horizons
from ensemble_horizon.versions.pairing import pair
from ensemble_horizon.versions.verified import compare_verified
from ensemble_horizon.vocabulary import LEAD, MEMBER, START


def compare_versions(
    a: xr.DataArray | xr.Dataset,
    b: xr.DataArray | xr.Dataset,
    analysis: xr.DataArray | None = None,
    *,
    tolerance: float | None = None,
    saturation_fraction: float | None = None,
    climatology_fraction: float | None = None,
    chance: float | None = None,
    beyond: float | None = None,
    hold: float = 0.0,
    saturation: xr.DataArray | float | None = None,
    climatology: xr.DataArray | float | None = None,
    region: Region | None = None,
    area: xr.DataArray | None = None,
    last_lead: float | tuple[float, float] | None = None,
    confidence: float = 0.9,
) -> xr.Dataset:
    """Hours that version b gains over version a, with interval and p-value.

    Parameters
    ----------
    a, b : DataArray (start, lead, member, ...)
        Ensembles of both versions, with the times of their starts. Or the datasets that `horizon`
        gives for each, by whatever curve and criterion; then only ``last_lead`` and ``confidence``
        are named beside them.
    analysis : DataArray, optional
        With ensembles: what came, as in `crps`; their scores are then compared as well.
    tolerance, saturation_fraction, climatology_fraction, chance, hold, saturation, climatology
        The one criterion, for the spread of each start, as in `horizon`.
    beyond : float
        With ``chance``: the distance from the median, as in `exceedance`.
    region : Region, optional
        Compare the spread over a region instead of at every point; with ``area`` for cell areas, as
        in `area_curve`.
    last_lead : float, or a pair for a and b
        With horizon datasets: where the runs end. Ensembles tell by themselves.
    confidence : float

    Returns
    -------
    Dataset, see `compare_horizons`. Ensembles are compared on their common leads. On a map, hand
    ``p_value`` to `false_discovery`. With an analysis also, by lead, differences of the fair CRPS
    and of the squared error of the ensemble mean: ``crps_difference``, ``crps_difference_low``,
    ``crps_difference_high``, ``crps_p_value``, ``crps_a``, ``crps_b``, ``crps_starts``,
    ``crps_reason``, and the same with ``squared_error_``; b is better where they are below zero.

    Raises
    ------
    ArgumentError
        if one is an ensemble and the other a dataset of horizons, not exactly one criterion is
        named, no start or lead is shared, a start stands there twice, or points differ.

    Notes
    -----
    A version whose members stay closer together gains hours here whether or not it errs less:
    spread speaks of what the model believes. An analysis tells; and curves of error or skill give
    horizons too, which can be handed over.

    Examples
    --------
    >>> rng = np.random.default_rng(1)
    >>> lead = np.arange(0.0, 126.0, 6.0)
    >>> growth = 0.1 * np.exp(0.04 * lead)[:, np.newaxis]
    >>> old, new = (
    ...     xr.DataArray(size * growth * rng.standard_normal((30, 21, 20)),
    ...                  dims=("start", "lead", "member"),
    ...                  coords={"start": np.arange(30), "lead": lead}) for size in (1.0, 0.7))
    >>> found = compare_versions(old, new, tolerance=2.0)  # ln(1 / 0.7) / 0.04 = 8.9
    >>> bool(found.gained_low < 8.9 < found.gained_high), bool(found.p_value < 0.01)
    (True, True)
    """
    named = (tolerance, saturation_fraction, climatology_fraction, chance)
    if isinstance(a, xr.Dataset) and isinstance(b, xr.Dataset):
        if any(value is not None for value in (*named, beyond, region, area, analysis)) or hold:
            raise ArgumentError(
                "criterion",
                expected="none beside datasets of horizons, which have theirs",
                found="a criterion, a hold, a region or an analysis",
                remedy="leave it out, or pass the ensembles",
            )
        return compare_horizons(a, b, last_lead=last_lead, confidence=confidence)
    if isinstance(a, xr.Dataset) or isinstance(b, xr.Dataset):
        raise ArgumentError(
            "a and b",
            expected="two ensembles, or two datasets of horizons",
            found="one of each",
            remedy="pick the variable out of the dataset, such as dataset['t2m']",
        )
    kind = criterion_from(
        tolerance=tolerance,
        saturation_fraction=saturation_fraction,
        climatology_fraction=climatology_fraction,
        chance=chance,
    ).kind
    _require_distance(kind, beyond, region, area)
    for name, ensemble in (("a", a), ("b", b)):
        for dimension in (LEAD, MEMBER):
            require_dimension(ensemble, dimension, name)
    paired = pair(a, b, START)
    limits = []
    for ensemble in (paired.a, paired.b):
        curve = spread(ensemble) if beyond is None else exceedance(ensemble, beyond)
        if region is not None or area is not None:
            curve = area_curve(curve, region=region, area=area)
        limit = horizon(
            curve,
            tolerance=tolerance,
            saturation_fraction=saturation_fraction,
            climatology_fraction=climatology_fraction,
            chance=chance,
            hold=hold,
            saturation=saturation,
            climatology=climatology,
        )
        limits.append(limit)
    lead = np.asarray(paired.a[LEAD].values, dtype=float)
    found = compare_horizons(
        *limits, last_lead=float(lead[-1]), first_lead=float(lead[0]), confidence=confidence
    )
    if analysis is not None:
        whole = region if region is not None or area is None else Region("domain")
        scores = compare_verified(
            paired.a, paired.b, analysis, region=whole, area=area, confidence=confidence
        )
        found = xr.merge([found, scores], combine_attrs="override")
    return found.assign_attrs(paired.attributes())


def _require_distance(
    kind: str, beyond: float | None, region: Region | None, area: xr.DataArray | None
) -> None:
    if (kind == "chance") != (beyond is not None):
        raise ArgumentError(
            "beyond",
            expected="the distance from the median, with chance and only with it",
            found=f"criterion {kind}, beyond {beyond}",
            remedy="pass beyond= in the units of the ensemble, or leave it out",
        )
    if kind == "chance" and (region is not None or area is not None):
        raise ArgumentError(
            "region",
            expected="no region with chance",
            found="a region or cell areas",
            remedy="average the shares of exceedance over the region, take their horizons, and "
            "pass those",
        )
