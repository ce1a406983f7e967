"""Continuous ranked probability score: kernels, and the labelled front."""

from __future__ import annotations

import math

import numpy as np
import xarray as xr
from scipy import special

from ensemble_horizon.checks import require_dimension
from ensemble_horizon.skill.alignment import aligned, over_members
from ensemble_horizon.skill.ordering import ordered_rows

# Points handled at once: members x slab x 4 bytes should stay inside a core's own cache.
_SLAB = 8192


def crps(ensemble: xr.DataArray, analysis: xr.DataArray, *, fair: bool = True) -> xr.DataArray:
    """Continuous ranked probability score of the ensemble at every point.

    Parameters
    ----------
    ensemble : DataArray (..., member, ...), NaN where a member has no value
    analysis : DataArray
        On the dimensions of the ensemble without ``member``, or on ``valid``, from which the valid
        times of the ensemble are taken.
    fair : bool
        The score that an ensemble of infinitely many such members would have on average; otherwise
        that of these members as they are.

    Returns
    -------
    DataArray without ``member``, in the units of the ensemble, lazy where the input is lazy. NaN
    where there is no analysis or no member, and of the fair score where there is only one.

    Raises
    ------
    ArgumentError
        if there is no ``member`` dimension, or the analysis is in other units, on another grid or
        at other times.

    Notes
    -----
    ``mean |x_m - y| - sum |x_m - x_k| / (2 M^2)``, the integral of ``(F - step)^2``; the fair score
    divides by ``2 M (M - 1)`` (Ferro 2014, Quarterly Journal of the Royal Meteorological Society,
    from memory), with M the number of members that have a value at the point. Of one member, or of
    any single forecast, it is the absolute error.

    Examples
    --------
    >>> members = xr.DataArray([0.0, 1.0, 3.0], dims="member")
    >>> round(float(crps(members, xr.DataArray(1.0))), 4)
    0.0
    >>> round(float(crps(members, xr.DataArray(1.0), fair=False)), 4)
    0.3333
    """
    require_dimension(ensemble, "member", "ensemble")
    result = over_members(_crps_last, ensemble, aligned(ensemble, analysis), fair=fair)
    return result.rename("crps").assign_attrs(
        long_name="continuous ranked probability score" + (", fair" if fair else ""),
        units=ensemble.attrs.get("units", "1"),
    )


def crps_of_departures(departure: np.ndarray, fair: bool = True) -> np.ndarray:
    """CRPS (P,) from the members' departures (M, P) from the analysis: numpy kernel.

    NaN stands for a member without a value, and for all members where there is no analysis.

    Examples
    --------
    >>> crps_of_departures(np.array([[-1.0], [0.0], [2.0]]), fair=False).round(4).tolist()
    [0.3333]
    """
    members = departure.shape[0]
    distance = np.abs(departure).sum(axis=0)
    if not np.isfinite(distance).all():
        return _crps_with_gaps(departure, fair)
    rows = ordered_rows(departure)
    # sum |x_m - x_k| over all pairs is 2 sum (2 i - M - 1) x_(i), taken here from the outside in.
    apart = np.zeros_like(distance)
    for place in range(members // 2):
        width = rows[members - 1 - place]
        width -= rows[place]
        width *= members - 1 - 2 * place
        apart += width
    with np.errstate(invalid="ignore", divide="ignore"):
        pairs = departure.dtype.type(members * (members - 1 if fair else members))
        return np.asarray(distance / members - apart / pairs)


def gaussian_crps(departure: np.ndarray, deviation: np.ndarray) -> np.ndarray:
    """CRPS of Gaussian forecasts from analysis minus mean, and their standard deviation.

    ``sigma [z (2 Phi(z) - 1) + 2 phi(z) - 1/sqrt(pi)]``, ``z = departure / sigma`` (Gneiting et al.
    2005, Monthly Weather Review, from memory); the absolute departure where sigma is zero.

    Examples
    --------
    >>> gaussian_crps(np.array([0.0]), np.array([1.0])).round(5).tolist()
    [0.23369]
    """
    away = np.abs(departure)
    with np.errstate(invalid="ignore", divide="ignore", over="ignore"):
        z = away / deviation
        density = np.exp(-0.5 * z * z) * math.sqrt(2 / math.pi) - 1 / math.sqrt(math.pi)
        score = deviation * (z * (2 * special.ndtr(z) - 1) + density)
    return np.where(deviation == 0, away, score)


def _crps_with_gaps(departure: np.ndarray, fair: bool) -> np.ndarray:
    present = np.isfinite(departure)
    count = present.sum(axis=0)
    ordered = np.sort(np.where(present, departure, np.nan), axis=0)  # NaN last
    row = np.arange(departure.shape[0])[:, np.newaxis]
    inside = row < count
    ordered = np.where(inside, ordered, 0)
    apart = (np.where(inside, 2 * row + 1 - count, 0) * ordered).sum(axis=0)
    with np.errstate(invalid="ignore", divide="ignore"):
        score = np.abs(ordered).sum(axis=0) / count
        score = score - apart / (count * (count - 1 if fair else count))
    return score.astype(departure.dtype, copy=False)


def _crps_last(members: np.ndarray, analysis: np.ndarray, *, fair: bool) -> np.ndarray:
    """CRPS with the members on the last axis, as xarray hands them over."""
    shape = np.broadcast_shapes(members.shape[:-1], analysis.shape)
    front = np.moveaxis(np.broadcast_to(members, (*shape, members.shape[-1])), -1, 0)
    front = front.reshape(front.shape[0], -1)
    truth = np.broadcast_to(analysis, shape).ravel()
    score = np.empty(truth.size, dtype=np.result_type(members, analysis, np.float32))
    for first in range(0, truth.size, _SLAB):
        piece = slice(first, first + _SLAB)
        departure = (front[:, piece] - truth[piece]).astype(score.dtype, copy=False)
        score[piece] = crps_of_departures(departure, fair)
    return score.reshape(shape)
