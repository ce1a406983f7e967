"""Calibration of the spread against analyses: the labelled front."""

from __future__ import annotations

from collections.abc import Sequence
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
from ensemble_horizon.serial import LEAST_STARTS, REASON_ATTRIBUTES
from ensemble_horizon.serial.starts import in_order
from ensemble_horizon.skill.consistency import EXPECTED, SQUARED
from ensemble_horizon.skill.factor import Factor, spread_factor
from ensemble_horizon.skill.smoothing import neighbour_means
from ensemble_horizon.spread.curves import spatial_dimensions
from ensemble_horizon.spread.places import area_weights, grid_points
from ensemble_horizon.vocabulary import LATITUDE, LEAD, LONGITUDE, START

MOST_POINTS = 4096
LEAD_OTHER = "lead_other"


def calibration_factor(
    pair: xr.Dataset,
    *,
    span: float = 0.3,
    radii_km: Sequence[float] = (),
    wanted: float = 0.15,
    confidence: float = 0.9,
) -> xr.Dataset:
    """Factor by which the spread must be multiplied to be as large as the error.

    Parameters
    ----------
    pair : Dataset (start, lead, ...)
        From `spread_and_error`: ``expected_squared_error`` and ``squared_error`` of each start, for
        regions, places, or a grid of up to 4096 points.
    span : float from 0 to 1
        Share of the leads that each straight line of the smoothing goes through; 0 does not smooth.
    radii_km : sequence of float, for grids
        Where the uncertainty at a point is larger than wanted, squared errors and variances are
        averaged over its neighbourhood, by the first of these radii that is enough, or the last.
    wanted : float
        The relative standard error of the factor that is still accepted, at every lead.
    confidence : float

    Returns
    -------
    Dataset without ``start``:

    - ``factor`` (lead, ...), ``low``, ``high``; NaN at places whose starts are too few for the
      uncertainty that is wanted, where nothing should be calibrated;
    - ``log_variance`` (lead, ...): sampling variance of ln(factor^2), which adds to that of the
      logarithm of the spread variance, 2/dof; ``noise_correlation`` (lead, lead_other) of it;
    - ``starts``, ``starts_needed`` for what is wanted, ``interval_reason`` for missing intervals;
    - ``radius_km`` (...) of the neighbourhood, zero where there is none.

    Raises
    ------
    ArgumentError
        if a variable or dimension is missing, there is one start only or one twice, or the starts
        are too few at every place: the message tells how many are needed.

    Notes
    -----
    ``f^2 = mean(e^2) / mean((M + 1)/M s2)`` over starts (Leutbecher and Palmer 2008, Fortin et al.
    2014; from memory), to be applied to other starts than these. The smoothing and the uncertainty
    stand at the top of `ensemble_horizon.skill.factor`. Errors of the analyses are in the factor:
    against analyses that are themselves uncertain, that of the first leads comes out too large.
    For a fine grid, average both squares over cells of it, calibrate these, and bring the factors
    back by `calibration_on_grid`.

    Examples
    --------
    >>> rng = np.random.default_rng(0)
    >>> squared = xr.DataArray(4 * rng.gamma(8, 1 / 8, (40, 4)), dims=("start", "lead"),
    ...                        coords={"lead": [0.0, 6.0, 12.0, 18.0]})
    >>> pair = xr.Dataset({"squared_error": squared,
    ...                    "expected_squared_error": xr.ones_like(squared)})
    >>> found = calibration_factor(pair)
    >>> bool((found.low < 2).all() & (found.high > 2).all())
    True
    """
    require_fraction(wanted, "wanted")
    require_fraction(confidence, "confidence")
    if not 0 <= span <= 1:
        raise ArgumentError(
            "span", expected="a share from 0 to 1", found=repr(span), remedy="correct the value"
        )
    radii = [require_positive(radius, "radii_km") for radius in radii_km]
    expected, squared, rest = _series(pair)
    lead = require_increasing(expected[LEAD].values, f"pair[{LEAD!r}]")
    shape = expected.shape[2:]
    flat = [item.values.astype(float).reshape(*item.shape[:2], -1) for item in (expected, squared)]
    options: dict[str, Any] = {"span": span, "wanted": wanted, "confidence": confidence}
    factor = spread_factor(lead, *flat, **options)
    radius = np.zeros(flat[0].shape[2])
    if radii:
        factor, radius = _pooled(factor, lead, flat, _grid(expected), radii, options)
    enough = _accepted(factor, wanted)
    _require_enough(factor, enough, expected.sizes[START], wanted)
    return _labelled(factor, enough, radius, expected, rest, shape)


def apply_calibration(spread: xr.DataArray, calibration: xr.Dataset) -> xr.DataArray:
    """The spread multiplied by the factor, at the leads of the spread.

    Parameters
    ----------
    spread : DataArray (..., lead, ...)
    calibration : Dataset from `calibration_factor`, for the same places

    Returns
    -------
    DataArray like the spread. The logarithm of the factor is interpolated between its leads; NaN
    at places that were not calibrated.

    Raises
    ------
    ArgumentError
        if the spread goes beyond the leads of the calibration, or is of other places.

    Examples
    --------
    >>> calibration = xr.Dataset({"factor": ("lead", [1.0, 4.0])}, coords={"lead": [0.0, 12.0]})
    >>> spread = xr.DataArray([1.0, 1.0], dims="lead", coords={"lead": [6.0, 12.0]})
    >>> apply_calibration(spread, calibration).values.round(9).tolist()
    [2.0, 4.0]
    """
    require_dimension(spread, LEAD, "spread")
    if "factor" not in calibration:
        raise ArgumentError(
            "calibration",
            expected="the dataset that calibration_factor gives, with factor",
            found=f"variables {sorted(map(str, calibration.data_vars))}",
            remedy="call calibration_factor",
        )
    factor = calibration["factor"]
    wanted = require_increasing(spread[LEAD].values, f"spread[{LEAD!r}]")
    held = require_increasing(factor[LEAD].values, f"calibration[{LEAD!r}]")
    if wanted[0] < held[0] - 1e-6 or wanted[-1] > held[-1] + 1e-6:
        raise ArgumentError(
            f"spread[{LEAD!r}]",
            expected=f"leads within those of the calibration, {held[0]:g} to {held[-1]:g}",
            found=f"{wanted[0]:g} to {wanted[-1]:g}",
            remedy="calibrate with runs as long as these; a factor is not extrapolated",
        )
    places = np.interp(wanted, held, np.arange(held.size))
    below = np.minimum(places.astype(int), max(held.size - 2, 0))
    above = np.minimum(below + 1, held.size - 1)
    share = xr.DataArray(places - below, dims=LEAD, coords={LEAD: spread[LEAD].values})
    logs = factor.copy(data=np.log(factor.values))
    first, second = (
        logs.isel({LEAD: index}).assign_coords({LEAD: spread[LEAD].values})
        for index in (below, above)
    )
    # A lead that is met exactly does not hang on whether its neighbour has a factor.
    between = second.where(share > 0, 0.0) * share + first.where(share < 1, 0.0) * (1 - share)
    try:
        joined = xr.align(spread, between, join="exact", copy=False)
    except ValueError as error:
        raise ArgumentError(
            "spread",
            expected=f"the places of the calibration, {dict(factor.sizes)}",
            found=f"{dict(spread.sizes)}, or others of the same number",
            remedy="calibrate on the grid of the spread, or use calibration_on_grid",
        ) from error
    calibrated: xr.DataArray = joined[0] * np.exp(joined[1])
    order = [*spread.dims, *(name for name in calibrated.dims if name not in spread.dims)]
    return calibrated.transpose(*order).rename(spread.name).assign_attrs(spread.attrs)


def _series(pair: xr.Dataset) -> tuple[xr.DataArray, xr.DataArray, list[Any]]:
    missing = [name for name in (EXPECTED, SQUARED) if name not in pair]
    if missing:
        raise ArgumentError(
            "pair",
            expected=f"the dataset that spread_and_error gives, with {EXPECTED} and {SQUARED}",
            found=f"variables {sorted(map(str, pair.data_vars))}",
            remedy="call spread_and_error",
        )
    for name in (START, LEAD):
        require_dimension(pair, name, "pair")
    if LEAD not in pair.coords:
        raise ArgumentError(
            f"pair[{LEAD!r}]",
            expected="a lead coordinate",
            found="a dimension without one",
            remedy=f"attach it, for instance with .assign_coords({LEAD}=...)",
        )
    ordered = in_order(pair[[EXPECTED, SQUARED]], START, "pair")
    rest = [name for name in ordered[EXPECTED].dims if name not in (START, LEAD)]
    order = [START, LEAD, *rest]
    return ordered[EXPECTED].transpose(*order), ordered[SQUARED].transpose(*order), rest


def _grid(field: xr.DataArray) -> tuple[np.ndarray, np.ndarray]:
    space = spatial_dimensions(field)
    if space != tuple(field.dims[2:]) or np.prod(field.shape[2:]) > MOST_POINTS:
        raise ArgumentError(
            "pair",
            expected=f"with radii_km, a grid of up to {MOST_POINTS} points and nothing else",
            found=f"{dict(zip(field.dims[2:], field.shape[2:], strict=True))}",
            remedy="average squared errors and variances over coarser cells first",
        )
    return grid_points({name: field[name] for name in (LATITUDE, LONGITUDE)})


def _accepted(factor: Factor, wanted: float) -> np.ndarray:
    """Places (K,) whose factor is as certain as wanted wherever it has a value."""
    known = np.isfinite(factor.log_square)
    with np.errstate(invalid="ignore"):
        good = np.sqrt(factor.log_variance) / 2 <= wanted
    return known.any(axis=0) & (good | ~known).all(axis=0)


def _pooled(
    factor: Factor,
    lead: np.ndarray,
    flat: list[np.ndarray],
    grid: tuple[np.ndarray, np.ndarray],
    radii: list[float],
    options: dict[str, Any],
) -> tuple[Factor, np.ndarray]:
    """Factors of wider neighbourhoods at points that are not certain enough."""
    latitude, longitude = grid
    weights = area_weights(latitude)
    radius = np.zeros(latitude.size)
    for size in sorted(radii):
        poor = ~_accepted(factor, options["wanted"]) & np.isfinite(factor.log_square).any(axis=0)
        if not poor.any():
            break
        both = np.isfinite(flat[0]) & np.isfinite(flat[1])
        means = [
            neighbour_means(
                np.where(both, item, np.nan).reshape(-1, latitude.size),
                latitude, longitude, weights, size,
            ).reshape(item.shape)[..., poor]
            for item in flat
        ]  # fmt: skip
        wider = spread_factor(lead, *means, **options)
        radius[poor] = size
        for name in Factor._fields:
            if name != "correlation":
                getattr(factor, name)[..., poor] = getattr(wider, name)
    return factor, radius


def _require_enough(factor: Factor, enough: np.ndarray, starts: int, wanted: float) -> None:
    if enough.any():
        return
    if not np.isfinite(factor.needed).any():
        raise ArgumentError(
            "pair",
            expected="spread and error above zero at some lead and place",
            found="none",
            remedy="see that analyses are there at the valid times, and that members differ",
        )
    needed = int(np.nanmin(factor.needed))
    raise ArgumentError(
        "pair",
        expected=f"at least {LEAST_STARTS} starts, and a relative uncertainty of the factor of "
        f"{wanted:g} or less",
        found=f"{starts} starts, for which at the best place about {needed} are needed",
        remedy=f"verify about {needed} starts, average over larger regions, or accept a larger "
        "uncertainty by wanted=",
    )


def _labelled(
    factor: Factor,
    enough: np.ndarray,
    radius: np.ndarray,
    like: xr.DataArray,
    rest: list[Any],
    shape: tuple[int, ...],
) -> xr.Dataset:
    values = {
        "factor": (np.exp(factor.log_square / 2), "factor from spread to error"),
        "low": (factor.low, "lower end of the interval of the factor"),
        "high": (factor.high, "upper end of the interval of the factor"),
        "log_variance": (factor.log_variance, "sampling variance of ln(factor^2)"),
    }
    data: dict[str, Any] = {
        name: (
            [LEAD, *rest],
            np.where(enough, item, np.nan).reshape(-1, *shape),
            {"long_name": text, "units": "1"},
        )
        for name, (item, text) in values.items()
    }
    whole = [LEAD, *rest]
    count = {"long_name": "starts that have both spread and error", "units": "1"}
    data["starts"] = (whole, factor.starts.reshape(-1, *shape), count)
    reason = factor.reason.reshape(-1, *shape)
    data["interval_reason"] = (whole, reason, dict(REASON_ATTRIBUTES))
    needed = {"long_name": "starts needed for the uncertainty wanted", "units": "1"}
    data["starts_needed"] = (rest, factor.needed.reshape(shape), needed)
    size = {"long_name": "radius of the neighbourhood", "units": "km"}
    data["radius_km"] = (rest, radius.reshape(shape), size)
    noise = {"long_name": "correlation of the noise of ln(factor^2) between leads", "units": "1"}
    data["noise_correlation"] = ([LEAD, LEAD_OTHER], factor.correlation, noise)
    coords = {name: item for name, item in like.coords.items() if START not in item.dims}
    return xr.Dataset(data, coords=coords)
