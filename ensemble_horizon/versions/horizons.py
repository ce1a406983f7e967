"""Hours gained: horizons of two versions on the same starts."""

from __future__ import annotations

import numpy as np
import xarray as xr

from ensemble_horizon.checks import require_fraction
from ensemble_horizon.errors import ArgumentError
from ensemble_horizon.horizon.censoring import WaitingTimes, waiting_times
from ensemble_horizon.horizon.survival import log_rank
from ensemble_horizon.versions.differences import mean_difference
from ensemble_horizon.versions.pairing import pair
from ensemble_horizon.vocabulary import START

_COLUMNS = 1024


def compare_horizons(
    a: xr.Dataset,
    b: xr.Dataset,
    *,
    last_lead: float | tuple[float, float] | None = None,
    first_lead: float | None = None,
    dim: str = START,
    confidence: float = 0.9,
    shared_variance: xr.DataArray | float | None = None,
    shared_dof: float = np.inf,
) -> xr.Dataset:
    """Lead time that version b gains over version a, on the starts that both have.

    Parameters
    ----------
    a, b : Dataset (start, ...)
        From `horizon`: ``horizon`` and ``status`` for several starts, places and points as you
        like. Labels of ``start`` say what belongs together.
    last_lead : float, or a pair for a and b, in lead units
        Where the runs end. From the coordinate ``lead`` where the datasets have one.
    first_lead : float
        Likewise; zero where it is not known.
    confidence : float
        Of the interval.
    shared_variance : DataArray or float, in squares of lead units
        Variance of the mean gain from what is the same at all starts, such as the factors of a
        calibration, on the points of the horizons: their scatter over starts does not tell of it.
        Interval and p-value take it in.
    shared_dof : float
        Degrees of freedom that it is known to.

    Returns
    -------
    Dataset without ``start``:

    - ``gained``, ``gained_low``, ``gained_high`` (lead units): mean of b - a, each horizon counted
      up to ``restricted_to``, the end of the shorter runs. So every start is fully observed, also
      where the limit lies beyond the run, and a gain beyond that end is not counted;
    - ``p_value`` against no gain, two-sided; ``log_rank_p``: a second opinion on the whole
      distribution of the limits, which takes all starts as independent and unpaired;
    - ``mean_a``, ``mean_b``: mean horizon up to ``restricted_to``; ``beyond_a``, ``beyond_b``:
      starts whose limit lies beyond it;
    - ``starts`` compared; ``reason``: why there is no interval, where there is none;
    - with ``shared_variance`` its root, ``shared_error``.

    The attributes ``starts_only_in_a`` and ``starts_only_in_b`` name what was left out.

    Raises
    ------
    ArgumentError
        if a start stands there twice, no start is shared, points differ, or the last lead is not
        known.

    Notes
    -----
    Interval and p-value: `ensemble_horizon.serial.serial_mean`; restricted means: Irwin 1949
    (Journal of Hygiene), Royston and Parmar 2013 (BMC Medical Research Methodology); log-rank:
    Mantel 1966. A start that has no data in one of the two counts in neither.

    Examples
    --------
    >>> start = np.arange(12)
    >>> old = xr.Dataset({"horizon": ("start", 60.0 + start % 5), "status": ("start", 0 * start)},
    ...                  coords={"start": start})
    >>> new = old.assign(horizon=old.horizon + 6.0 + start % 3)
    >>> found = compare_horizons(old, new, last_lead=120.0)
    >>> float(found.gained), bool(found.gained_low < 7.0 < found.gained_high)
    (7.0, True)
    """
    require_fraction(confidence, "confidence")
    ends = last_lead if isinstance(last_lead, tuple) else (last_lead, last_lead)
    times = (waiting_times(a, "a", ends[0], first_lead), waiting_times(b, "b", ends[1], first_lead))
    _require_same_units(a, b)
    end = min(float(item.last_lead) for item in times)
    paired = pair(_observed(times[0], end), _observed(times[1], end), dim)
    units = str(a["horizon"].attrs.get("units", "1"))
    both = paired.a["limit"].notnull() & paired.b["limit"].notnull()
    limits = [data["limit"].where(both).assign_attrs(units=units) for data in (paired.a, paired.b)]
    reached = [data["reached"] & both for data in (paired.a, paired.b)]
    text = "lead time gained by version b over version a"
    shared = None
    if shared_variance is not None:
        noise = _on_points(shared_variance, limits[0].isel({dim: 0}, drop=True))
        shared = (noise.values.ravel(), shared_dof)
    found = mean_difference(limits[0], limits[1], dim, confidence, "gained", text, shared)
    rest = [str(name) for name in found["gained"].dims]
    if shared_variance is not None:
        about = {"long_name": "standard error of gained from what all starts share", "units": units}
        found["shared_error"] = (rest, np.sqrt(noise.values), about)
    found["log_rank_p"] = (
        rest,
        _log_rank(limits, reached, [dim, *rest]),
        {"long_name": "p-value of the log-rank test, starts as independent", "units": "1"},
    )
    for name, within in zip("ab", reached, strict=True):
        beyond = (both & ~within).sum(dim).transpose(*rest)
        text = f"starts whose limit under version {name} lies beyond restricted_to"
        found[f"beyond_{name}"] = (rest, beyond.values, {"long_name": text, "units": "1"})
    found["restricted_to"] = ((), end, {"long_name": "end of the shorter runs", "units": units})
    criterion = {key: value for key, value in a.attrs.items() if str(key).startswith("criterion")}
    return found.assign_attrs(criterion | paired.attributes())


def _on_points(variance: xr.DataArray | float, points: xr.DataArray) -> xr.DataArray:
    """A variance on the points of the horizons, in their order."""
    given = xr.DataArray(variance)
    if bool((given < 0).any()) or not set(given.dims) <= set(points.dims):
        raise ArgumentError(
            "shared_variance",
            expected=f"variances, on dimensions among {tuple(points.dims)}",
            found=f"dimensions {tuple(given.dims)}, values from {float(given.min()):g}",
            remedy="give the variance of the mean gain, a number or one a point",
        )
    return given.broadcast_like(points).transpose(*points.dims)


def _observed(times: WaitingTimes, end: float) -> xr.Dataset:
    """What is seen of the limits by the end of the shorter runs."""
    reached = times.reached & (times.time <= end)
    return xr.Dataset({"limit": times.time.clip(max=end), "reached": reached})


def _require_same_units(a: xr.Dataset, b: xr.Dataset) -> None:
    units = [str(data["horizon"].attrs.get("units", "1")) for data in (a, b)]
    if units[0] != units[1]:
        raise ArgumentError(
            "a and b",
            expected="horizons in the same units",
            found=f"a: {units[0]}; b: {units[1]}",
            remedy="convert the leads of one before its horizons are taken",
        )


def _log_rank(
    limits: list[xr.DataArray], reached: list[xr.DataArray], dims: list[str]
) -> np.ndarray:
    shape = limits[0].transpose(*dims).shape
    flat = [item.transpose(*dims).values.reshape(shape[0], -1) for item in (*limits, *reached)]
    p_value = np.empty(flat[0].shape[1])
    for first in range(0, p_value.size, _COLUMNS):
        part = slice(first, first + _COLUMNS)
        time_a, time_b, event_a, event_b = (item[:, part] for item in flat)
        p_value[part] = log_rank((time_a, time_b), (event_a, event_b))
    return p_value.reshape(shape[1:])
