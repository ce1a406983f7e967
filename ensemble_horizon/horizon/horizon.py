"""From a growth curve and a criterion to a lead-time limit: the labelled front."""

from __future__ import annotations

from collections.abc import Callable
from typing import Any

import numpy as np
import xarray as xr

from ensemble_horizon.checks import (
    require_dimension,
    require_fraction,
    require_increasing,
    require_positive,
)
from ensemble_horizon.errors import ArgumentError
from ensemble_horizon.growth import fit_growth
from ensemble_horizon.horizon.criteria import Chance, Criterion, Levels, criterion_from
from ensemble_horizon.horizon.crossing import first_crossing
from ensemble_horizon.horizon.interval import calibrated_moves, spread_bounds
from ensemble_horizon.horizon.trend import grows, share_grows
from ensemble_horizon.spread.sampling import LeadNoise
from ensemble_horizon.vocabulary import LEAD, STATUS_ATTRIBUTES, Status


def horizon(
    curve: xr.DataArray,
    *,
    tolerance: float | None = None,
    saturation_fraction: float | None = None,
    climatology_fraction: float | None = None,
    chance: float | None = None,
    hold: float = 0.0,
    saturation: xr.DataArray | float | None = None,
    climatology: xr.DataArray | float | None = None,
    sampling: xr.Dataset | None = None,
    confidence: float = 0.9,
    dim: str = LEAD,
) -> xr.Dataset:
    """Lead-time limit of each curve under one criterion.

    Parameters
    ----------
    curve : DataArray (..., lead, ...)
        Spread or RMS error; for ``chance`` the share of members beyond the distance, as
        `exceedance` gives it. The lead coordinate must increase.
    tolerance : float
        In the units of the curve.
    saturation_fraction : float
        Fraction of ``saturation``, which is fitted (law chosen by AICc) where it is not given.
    climatology_fraction : float
        Fraction of ``climatology``, the climatological standard deviation, which must be given.
    chance : float
        Probability that a member lies beyond the distance.
    hold : float, in lead units
        A crossing counts only if the curve stays above the threshold for this long.
    sampling : Dataset, optional
        From `sampling`, for ``low`` and ``high``. One noise for all curves.
    confidence : float
        Of the interval. It covers the scatter from having few members, not the model's own error,
        and takes a saturation level as known.

    Returns
    -------
    Dataset without ``lead``: ``horizon`` (lead units, NaN unless the status is ``reached``),
    ``status`` (int8 CF flags, see `Status`), ``threshold``, and with ``sampling`` also ``low`` and
    ``high``, infinite where they lie beyond the run, NaN where the status is ``no_growth`` or
    ``no_data``.

    Raises
    ------
    ArgumentError
        if not exactly one criterion is named, what it rests on is missing, or leads do not
        increase.

    Examples
    --------
    >>> lead = xr.DataArray([0.0, 6.0, 12.0, 18.0], dims="lead", attrs={"units": "hours"})
    >>> curve = xr.DataArray([1.0, 2.0, 4.0, 8.0], dims="lead", coords={"lead": lead})
    >>> limit = horizon(curve, tolerance=3.0)
    >>> float(limit.horizon), Status(int(limit.status)).name
    (9.0, 'reached')
    """
    require_dimension(curve, dim, "curve")
    require_positive(hold, "hold", zero=True)
    require_fraction(confidence, "confidence")
    lead = require_increasing(_lead_values(curve, dim), f"curve[{dim!r}]")
    criterion = criterion_from(
        tolerance=tolerance,
        saturation_fraction=saturation_fraction,
        climatology_fraction=climatology_fraction,
        chance=chance,
    )
    if criterion.kind == "saturation_fraction" and saturation is None:
        saturation = fit_growth(curve, dim=dim)["saturation"]
    if criterion.kind == "climatology_fraction" and climatology is None:
        raise ArgumentError(
            "climatology",
            expected="the climatological standard deviation",
            found="nothing",
            remedy="pass climatology=, a number or a field on the grid of the curve",
        )
    levels = Levels(
        saturation=_level(saturation, curve, dim), climatology=_level(climatology, curve, dim)
    )
    rest = [name for name in curve.dims if name != dim]
    values = curve.transpose(dim, *rest).values.astype(float)
    flat = values.reshape(lead.size, -1)
    threshold = np.broadcast_to(np.asarray(criterion.threshold(levels), float), (flat.shape[1],))
    noise = None if sampling is None else _noise(sampling)

    def growing(rows: np.ndarray) -> np.ndarray:
        if criterion.on_share:
            return share_grows(lead, flat[:, rows])
        covariance = None if noise is None else noise.log_spread_covariance()
        return grows(lead, flat[:, rows], covariance)

    time, status = judge(lead, flat, threshold, hold, growing)
    data: dict[str, np.ndarray] = {"horizon": time, "status": status, "threshold": threshold}
    if noise is not None:
        if criterion.on_share:
            raise ArgumentError(
                "sampling",
                expected="no sampling noise with chance",
                found="a sampling dataset, which speaks of spread",
                remedy="leave it out; shares have a binomial interval of their own",
            )
        silent = (status == Status.no_data) | (status == Status.no_growth)
        ends = _bounds(lead, flat, threshold, noise, confidence, hold)
        data["low"], data["high"] = (np.where(silent, np.nan, end) for end in ends)
    return _labelled(data, curve, rest, values.shape[1:], dim, criterion)


def judge(
    lead: np.ndarray,
    curves: np.ndarray,
    threshold: np.ndarray,
    hold: float,
    growing: Callable[[np.ndarray], np.ndarray],
) -> tuple[np.ndarray, np.ndarray]:
    """Horizon (N,) and status (N,) of N curves (L, N): numpy kernel.

    The horizon is NaN unless the status is ``reached``. A curve needs two leads with a value (one,
    where the run has no more), or one at which the threshold is already exceeded; and a threshold,
    unless it does not grow. ``growing`` tells of the curves at given positions whether they grow;
    it is asked only of those that do not cross.
    """
    crossing = first_crossing(lead, curves, threshold, hold)
    status = np.full(curves.shape[1], Status.reached, dtype=np.int8)
    rest = np.flatnonzero(~np.isfinite(crossing.time) & ~crossing.at_start)
    if rest.size:
        # A single lead tells nothing of growth: its run ends before the threshold, no more.
        grown = growing(rest) if lead.size > 1 else True
        status[rest] = np.where(grown, Status.beyond_run, Status.no_growth)
    status[crossing.at_start] = Status.at_start
    few = (crossing.points < min(2, lead.size)) & ~crossing.at_start
    aimless = ~np.isfinite(threshold) & (status != Status.no_growth)
    status[few | aimless] = Status.no_data
    return np.where(status == Status.reached, crossing.time, np.nan), status


def status_names(status: xr.DataArray) -> xr.DataArray:
    """Status flags spelled out.

    Examples
    --------
    >>> status_names(xr.DataArray([0, 1])).values.tolist()
    ['reached', 'beyond_run']
    """
    names = np.array([item.name for item in Status])
    return status.copy(data=names[status.values.astype(int)]).drop_attrs()


def _bounds(
    lead: np.ndarray,
    curves: np.ndarray,
    threshold: np.ndarray,
    noise: LeadNoise,
    confidence: float,
    hold: float,
) -> tuple[np.ndarray, np.ndarray]:
    low, high = np.full(curves.shape[1], np.nan), np.full(curves.shape[1], np.nan)
    for place in range(curves.shape[1]):
        if not np.isfinite(threshold[place]):
            continue
        level = float(threshold[place])
        curve = curves[:, place]
        moves = calibrated_moves(lead, curve, level, noise, confidence, hold=hold)
        ends = spread_bounds(lead, curve[:, np.newaxis], level, noise.dof, moves, hold)
        low[place], high[place] = ends[0][0], ends[1][0]
    return low, high


def _noise(sampling: xr.Dataset) -> LeadNoise:
    return LeadNoise(sampling["dof"].values, sampling["noise_correlation"].values)


def _lead_values(curve: xr.DataArray, dim: str) -> np.ndarray:
    if dim not in curve.coords:
        raise ArgumentError(
            f"curve[{dim!r}]",
            expected="a lead coordinate",
            found="a dimension without one",
            remedy=f"attach it, for instance with .assign_coords({dim}=...)",
        )
    return np.asarray(curve[dim].values)


def _level(level: xr.DataArray | float | None, curve: xr.DataArray, dim: str) -> Any:
    if level is None or isinstance(level, int | float):
        return level
    shape = curve.isel({dim: 0}, drop=True)
    try:
        return np.asarray(xr.broadcast(level, shape)[0].transpose(*shape.dims).values).ravel()
    except ValueError as error:
        raise ArgumentError(
            "saturation or climatology",
            expected=f"a field on dimensions {shape.dims}",
            found=f"{level.dims} {level.shape}",
            remedy="interpolate it to the grid of the curve",
        ) from error


def _labelled(
    data: dict[str, np.ndarray],
    curve: xr.DataArray,
    rest: list[Any],
    shape: tuple[int, ...],
    dim: str,
    criterion: Criterion,
) -> xr.Dataset:
    lead_units = curve[dim].attrs.get("units", "1")
    label = criterion.label
    if isinstance(criterion, Chance):
        label = f"chance {criterion.probability:g}"  # the distance is in the shares already
    units = criterion.threshold_units(str(curve.attrs.get("units", "1")))
    attributes: dict[str, dict[str, Any]] = {
        "horizon": {"long_name": "horizon", "units": lead_units},
        "low": {"long_name": "lower end of the interval of the horizon", "units": lead_units},
        "high": {"long_name": "upper end of the interval of the horizon", "units": lead_units},
        "threshold": {"long_name": "threshold of the criterion", "units": units},
        "status": STATUS_ATTRIBUTES,
    }
    coords = {name: coord for name, coord in curve.coords.items() if dim not in coord.dims}
    return xr.Dataset(
        {name: (rest, values.reshape(shape), attributes[name]) for name, values in data.items()},
        coords=coords,
        attrs={"criterion": label, "criterion_kind": criterion.kind},
    )
