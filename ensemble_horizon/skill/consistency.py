"""Whether the spread of an ensemble is as large as its error: kernels and labelled fronts."""

from __future__ import annotations

import numpy as np
import xarray as xr

from ensemble_horizon.checks import require_dimension
from ensemble_horizon.errors import ArgumentError
from ensemble_horizon.skill.alignment import aligned, over_members
from ensemble_horizon.skill.averages import average
from ensemble_horizon.spread.moments import member_variance
from ensemble_horizon.spread.places import Region
from ensemble_horizon.vocabulary import MEMBER

EXPECTED, SQUARED = "expected_squared_error", "squared_error"


def spread_error_ratio(
    ensemble: xr.DataArray,
    analysis: xr.DataArray,
    *,
    over_starts: bool = True,
    region: Region | None = None,
    area: xr.DataArray | None = None,
) -> xr.DataArray:
    """Spread over error of the ensemble mean: 1 for a consistent ensemble, below 1 for too narrow.

    Parameters
    ----------
    ensemble : DataArray (start, lead, member, *space), each dimension but ``member`` optional
    analysis : DataArray on the dimensions of the ensemble without ``member``, or on ``valid``
    over_starts, region, area
        What to average over, as in `bias`.

    Returns
    -------
    DataArray, units "1": ``sqrt(mean((M + 1)/M s2) / mean(e^2))``, over starts and points that have
    an analysis and two members or more. NaN where there are none, infinite where there is no error.
    Lazy where the input is lazy.

    Raises
    ------
    ArgumentError
        if there are fewer than two members, or the analysis is in other units, on another grid or
        at other times.

    Notes
    -----
    Where truth is one more draw from the distribution of the members, ``E[(mean - truth)^2] =
    (M + 1)/M E[s2]`` (Leutbecher and Palmer 2008, Journal of Computational Physics; Fortin et al.
    2014, Journal of Hydrometeorology; from memory). Variances are averaged, never standard
    deviations. Errors of the analysis itself count as errors of the forecast: at short leads the
    ratio comes out too small by as much.

    Examples
    --------
    >>> rng = np.random.default_rng(0)
    >>> members = xr.DataArray(rng.normal(size=(5000, 10)), dims=("start", "member"))
    >>> truth = xr.DataArray(rng.normal(size=5000), dims="start")
    >>> round(float(spread_error_ratio(members, truth)), 1)
    1.0
    """
    pair = spread_and_error(ensemble, analysis, over_starts=over_starts, region=region, area=area)
    ratio: xr.DataArray = (pair[EXPECTED] / pair[SQUARED]) ** 0.5
    return ratio.rename("spread_error_ratio").assign_attrs(
        long_name="spread over root-mean-square error of the ensemble mean", units="1"
    )


def spread_and_error(
    ensemble: xr.DataArray,
    analysis: xr.DataArray,
    *,
    over_starts: bool = False,
    region: Region | None = None,
    area: xr.DataArray | None = None,
) -> xr.Dataset:
    """Squared error of the mean, and what it would be on average if the ensemble were consistent.

    Parameters, and errors raised, as in `spread_error_ratio`; starts stay apart by default, as
    `calibration_factor` and `score_interval` want them.

    Returns
    -------
    Dataset with ``expected_squared_error``, ``(M + 1)/M s2``, and ``squared_error``, in squared
    units of the ensemble, both over the same starts and points.

    Examples
    --------
    >>> members = xr.DataArray([0.0, 2.0], dims="member")
    >>> pair = spread_and_error(members, xr.DataArray(2.0))
    >>> float(pair.expected_squared_error), float(pair.squared_error)  # 3/2 * 2, (1 - 2)^2
    (3.0, 1.0)
    """
    require_dimension(ensemble, MEMBER, "ensemble")
    if ensemble.sizes[MEMBER] < 2:
        raise ArgumentError(
            "ensemble",
            expected="at least two members",
            found=f"{ensemble.sizes[MEMBER]}",
            remedy="open more member files; spread needs two",
        )
    error = (ensemble - aligned(ensemble, analysis)).transpose(..., MEMBER)
    expected = over_members(_expected_last, error)
    squared = (error.mean(MEMBER) ** 2).where(np.isfinite(expected))
    units = ensemble.attrs.get("units")
    attributes = {} if units is None or units == "1" else {"units": f"({units})2"}
    found = {
        EXPECTED: ("squared error of the mean of a consistent ensemble", expected),
        SQUARED: ("squared error of the ensemble mean", squared),
    }
    return xr.Dataset(
        {
            name: average(field, over_starts=over_starts, region=region, area=area).assign_attrs(
                long_name=text, **attributes
            )
            for name, (text, field) in found.items()
        }
    )


def expected_squared_error(variance: np.ndarray, count: np.ndarray) -> np.ndarray:
    """``(M + 1)/M s2`` with the number of members at each point: numpy kernel.

    Examples
    --------
    >>> expected_squared_error(np.array([2.0]), np.array([4])).tolist()
    [2.5]
    """
    factor = 1 + 1 / np.maximum(count, 1)
    return np.asarray(variance * factor.astype(variance.dtype))


def _expected_last(error: np.ndarray) -> np.ndarray:
    floats = error.astype(np.result_type(error.dtype, np.float32), copy=False)
    return expected_squared_error(*member_variance(np.moveaxis(floats, -1, 0)))
