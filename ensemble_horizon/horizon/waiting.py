"""Time to the limit over many starts: the labelled front."""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any

import numpy as np
import xarray as xr

from ensemble_horizon.checks import require_fraction, require_increasing
from ensemble_horizon.horizon.censoring import WaitingTimes, waiting_times
from ensemble_horizon.horizon.shares import dependence, quantile_lead, share_interval
from ensemble_horizon.horizon.survival import share_at, survival
from ensemble_horizon.serial import REASON_ATTRIBUTES, Reason, serial_mean
from ensemble_horizon.serial.starts import in_order
from ensemble_horizon.vocabulary import LEAD, START, STATUS_ATTRIBUTES, Status

QUANTILE = "quantile"
QUARTILES = (0.25, 0.5, 0.75)
_LEADS = 41
_COLUMNS = 4096


def time_to_limit(
    horizons: xr.Dataset,
    *,
    last_lead: xr.DataArray | float | None = None,
    first_lead: float | None = None,
    leads: Sequence[float] | np.ndarray | None = None,
    dim: str = START,
    confidence: float = 0.9,
) -> xr.Dataset:
    """Share of starts still usable at each lead, and the leads by which they no longer are.

    Parameters
    ----------
    horizons : Dataset (start, ...)
        From `horizon`, with ``horizon`` and ``status``, for two or more starts. A limit that lies
        beyond the run (``beyond_run``, ``no_growth``) is known only to be later than the last lead;
        ``at_start`` counts as met at the first lead; ``no_data`` is left out, and counted.
    last_lead : float or DataArray (start), in lead units
        Where the runs end. From the coordinate ``lead`` where the dataset has one.
    first_lead : float
        Likewise; zero where it is not known.
    leads : sequence (L)
        Leads of ``share``; 41 from the first to the last where none are given.
    confidence : float
        Of the intervals. They speak of other starts of the same season and model, take dependence
        between successive starts into account, and are given from ten starts on.

    Returns
    -------
    Dataset without ``start``:

    - ``share`` (lead, ...), ``share_low``, ``share_high``: share of starts whose limit is later;
      NaN where no run goes so far;
    - ``limit`` (quantile, ...), ``limit_low``, ``limit_high``, ``limit_status``: the lead by which
      a quarter, half and three quarters of the starts have met their limit; as in `horizon` a
      number only where the status is ``reached``, and ends infinite that lie beyond the run;
    - ``restricted_mean``, ``restricted_mean_low``, ``restricted_mean_high``: mean of the horizon or
      ``restricted_to``, whichever comes first, where ``restricted_to`` is the end of the shortest
      run: a mean that limits beyond the run cannot bias;
    - ``starts`` that have data, of which ``reached``, ``censored``, ``at_start``; and ``no_data``;
    - ``interval_reason``: why there are no intervals, where there are none.

    Raises
    ------
    ArgumentError
        if there is one start only or one twice, the last lead is not known, or a horizon is later.

    Notes
    -----
    Shares: Kaplan and Meier 1958, with the interval of Wilson for as many starts as these are worth
    (`ensemble_horizon.horizon.shares`). Quantiles: Brookmeyer and Crowley 1982. The interval of the
    restricted mean is that of `ensemble_horizon.serial.serial_mean`.

    Examples
    --------
    >>> horizons = xr.Dataset({"horizon": ("start", [30.0, 42.0, np.nan, 36.0]),
    ...                        "status": ("start", [0, 0, 1, 0])})
    >>> found = time_to_limit(horizons, last_lead=48.0, leads=[0, 24, 40, 48])
    >>> found.share.values.tolist(), found.limit.values.tolist()
    ([1.0, 1.0, 0.5, 0.25], [30.0, 36.0, 42.0])
    >>> float(found.restricted_mean)  # (30 + 42 + 48 + 36) / 4
    39.0
    """
    require_fraction(confidence, "confidence")
    ordered = in_order(horizons, dim, "horizons")
    times = waiting_times(ordered, "horizons", last_lead, first_lead)
    end = float(times.last_lead.max())
    grid = np.linspace(times.first_lead, end, _LEADS) if leads is None else leads
    grid = require_increasing(np.asarray(grid), "leads")
    rest = [str(name) for name in times.time.dims if name != dim]
    columns = _columns(times, grid, dim, rest, confidence)
    return _labelled(columns, ordered, times, grid, dim, rest)


def _columns(
    times: WaitingTimes, leads: np.ndarray, dim: str, rest: list[str], confidence: float
) -> dict[str, np.ndarray]:
    time = times.time.transpose(dim, *rest).values
    shape = time.shape[1:]
    time = time.reshape(time.shape[0], -1)
    reached = times.reached.transpose(dim, *rest).values.reshape(time.shape)
    parts = [
        _statistics(
            time[:, first : first + _COLUMNS],
            reached[:, first : first + _COLUMNS],
            (times.first_lead, float(times.last_lead.min()), float(times.last_lead.max())),
            leads,
            confidence,
        )
        for first in range(0, time.shape[1], _COLUMNS)
    ]
    whole = {name: np.concatenate([part[name] for part in parts], axis=-1) for name in parts[0]}
    return {name: values.reshape(values.shape[:-1] + shape) for name, values in whole.items()}


def _statistics(
    time: np.ndarray,
    reached: np.ndarray,
    ends: tuple[float, float, float],
    leads: np.ndarray,
    confidence: float,
) -> dict[str, np.ndarray]:
    """All statistics of K series (S, K); ``ends``: first lead, end of the shortest and longest."""
    first, shortest, longest = ends
    found = survival(time, reached)
    known = np.isfinite(time)
    starts = known.sum(axis=0)
    depends = dependence(found, first, longest)
    share, number = share_at(found, leads)
    low, high = share_interval(share, number, depends, confidence)
    # Before the first lead nothing can be lost.
    share[leads < first], low[leads < first], high[leads < first] = np.nan, np.nan, np.nan
    silent = depends.reason != Reason.given
    quantiles = [quantile_lead(found, part, first, depends, confidence) for part in QUARTILES]
    lead = np.stack([item.lead for item in quantiles])
    status = np.where(np.isfinite(lead), Status.reached, Status.beyond_run)
    status = np.where(lead <= first, Status.at_start, status)
    status = np.where(np.isnan(lead), Status.no_data, status)
    mean = serial_mean(np.minimum(time, shortest), confidence)
    return {
        "share": share,
        "share_low": np.where(silent, np.nan, low),
        "share_high": np.where(silent, np.nan, high),
        "limit": np.where(status == Status.reached, lead, np.nan),
        "limit_low": np.stack([item.low for item in quantiles]),
        "limit_high": np.stack([item.high for item in quantiles]),
        "limit_status": status.astype(np.int8),
        "restricted_mean": mean.mean,
        "restricted_mean_low": mean.low,
        "restricted_mean_high": mean.high,
        "starts": starts,
        "reached": (reached & known).sum(axis=0),
        "censored": (~reached & known).sum(axis=0),
        "interval_reason": depends.reason.astype(np.int8),
    }


def _labelled(
    columns: dict[str, np.ndarray],
    horizons: xr.Dataset,
    times: WaitingTimes,
    leads: np.ndarray,
    dim: str,
    rest: list[str],
) -> xr.Dataset:
    units = horizons["horizon"].attrs.get("units", "1")
    data: dict[str, Any] = {}
    for name, values in columns.items():
        own = {"share": [LEAD], "limit": [QUANTILE]}.get(name.split("_")[0], [])
        data[name] = ([*own, *rest], values, _attributes(name, units))
    kept = {
        name: coord
        for name, coord in horizons["horizon"].coords.items()
        if dim not in coord.dims and name != LEAD
    }
    coords = {**kept, LEAD: (LEAD, leads, {"units": units}), QUANTILE: list(QUARTILES)}
    found = xr.Dataset(data, coords=coords, attrs=horizons.attrs)
    for name in ("at_start", "no_data"):
        flagged = (horizons["status"] == Status[name]).sum(dim).transpose(*rest)
        found[name] = (rest, flagged.values, _attributes(name, units))
    # What counts as met at the first lead is told apart from what is reached later.
    later = found["reached"].values - found["at_start"].values
    found["reached"] = (rest, later, found["reached"].attrs)
    found["restricted_to"] = ((), float(times.last_lead.min()), {"units": units})
    return found


def _attributes(name: str, units: str) -> dict[str, Any]:
    if name == "limit_status":
        return dict(STATUS_ATTRIBUTES)
    if name == "interval_reason":
        return dict(REASON_ATTRIBUTES)
    kind = name.removesuffix("_low").removesuffix("_high")
    text = {
        "share": "share of starts still usable",
        "limit": "lead by which a part of the starts have met their limit",
        "restricted_mean": "mean horizon up to the end of the shortest run",
        "starts": "starts that have data",
        "reached": "starts with their limit within the run",
        "censored": "starts with their limit beyond the run, or without growth",
        "at_start": "starts with their limit at the first lead",
        "no_data": "starts left out, without data",
    }[kind]
    if name != kind:
        text = f"{name.rsplit('_', 1)[1]} end of the interval of: {text}"
    return {"long_name": text, "units": units if kind in ("limit", "restricted_mean") else "1"}
