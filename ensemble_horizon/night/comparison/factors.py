"""Noise of calibration factors in the hours gained.

The factors of a version are the same at all its starts, so their noise is too: it moves every limit
to the same side, and more starts do not lessen it. Its part of the variance of the mean gain is
found to first order. The covariance of the logarithms of the factors between leads is taken apart
into independent modes; along each the curves of all starts are multiplied by one standard deviation
up and down, and the limits placed anew, as they were placed before: half the difference of the two
mean horizons is what the mode brings. That is the standard error of the factor at the crossing over
the slope of the curve there, averaged over starts, without a derivative where a curve is flat or
ends before its limit.

Factors of two versions from different files count as independent. Where both were found from the
same past starts they go together in part, and the interval is then rather too wide. With one and
the same file for both versions the noise is one, and what it moves alike cancels.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import NamedTuple

import numpy as np
import xarray as xr

from ensemble_horizon.horizon.chosen import chosen_groups
from ensemble_horizon.horizon.curve_growth import select_where_enough
from ensemble_horizon.horizon.horizon import judge
from ensemble_horizon.night.calibrated import Factors, calibrated
from ensemble_horizon.night.variables import resolve_places, resolve_variable
from ensemble_horizon.products.calibration_file import read_calibration_file
from ensemble_horizon.runs import Catalogue
from ensemble_horizon.settings import Settings
from ensemble_horizon.vocabulary import CRITERION, PLACE, START, Status

_KEPT = 0.999  # share of the variance that the modes taken have


class SharedNoise(NamedTuple):
    """Variance (place, criterion) of the mean gain that all starts share, and what it is worth."""

    variance: xr.DataArray
    dof: float


@dataclass(frozen=True)
class CalibratedVersion:
    """One version with calibrated spread.

    Parameters
    ----------
    curves : Dataset (start, place, criterion, lead)
        Calibrated ``spread``, ``threshold``, ``saturation`` and ``status`` of single starts.
    factors : Factors at the leads of the curves, a column for each place
    law, scale : str, of the growth settings
    hold : float
    starts : int
        Past starts that the factors were found from.
    """

    curves: xr.Dataset
    factors: Factors
    law: str
    scale: str
    hold: float
    starts: int


def calibrated_version(
    settings: Settings, catalogue: Catalogue, name: str, curves: xr.Dataset
) -> CalibratedVersion | None:
    """What the calibration of one version says of a variable; None where it is not calibrated."""
    if settings.calibration is None:
        return None
    places = resolve_places(settings, catalogue)
    variable = resolve_variable(settings, catalogue, name)
    factors = calibrated(settings, catalogue, places, [variable], maps=False)[name].places
    held = read_calibration_file(settings.path(settings.calibration.file))[name]
    starts = int(np.median(held.places["starts"].values))
    growth = settings.growth
    return CalibratedVersion(curves, factors, growth.law, growth.scale, variable.hold, starts)


def factor_noise(
    versions: Sequence[CalibratedVersion | None], span: tuple[float, float]
) -> SharedNoise | None:
    """Part of the variance of the mean gain that comes from the factors; None without any.

    Parameters
    ----------
    versions : of a and b, on the same starts, places and criteria; None where one is not calibrated
    span : leads from which and up to which horizons count
    """
    there = [item for item in versions if item is not None]
    if not there:
        return None
    curves = there[0].curves
    names = curves[PLACE].values, curves[CRITERION].values
    variance = np.zeros((names[0].size, names[1].size))
    one_noise = len(there) == 2 and _alike(there[0].factors, there[1].factors)
    for place in range(names[0].size):
        for column in range(names[1].size):
            known = np.all([_known(item, place, column) for item in there], axis=0)
            shifts = [mean_shifts(item, place, column, span, known) for item in there]
            if one_noise:
                shifts = [shifts[1] - shifts[0]]
            variance[place, column] = sum(float((item**2).sum()) for item in shifts)
    coords = {PLACE: names[0], CRITERION: names[1]}
    dof = min(_dof(item.starts) for item in there)
    return SharedNoise(xr.DataArray(variance, dims=(PLACE, CRITERION), coords=coords), dof)


def mean_shifts(
    version: CalibratedVersion,
    place: int,
    criterion: int,
    span: tuple[float, float],
    known: np.ndarray,
) -> np.ndarray:
    """Change (J,) of the mean horizon over known starts (S,) by each mode of the noise."""
    one = version.curves.isel({PLACE: place, CRITERION: criterion})
    modes = _modes(version.factors, place)
    if str(one["criterion_kind"].values) == "chance" or not known.any():
        return np.zeros(len(modes))  # members are counted as they are
    curves = one["spread"].transpose(..., START).values[:, known]
    threshold, level = (one[name].values[known] for name in ("threshold", "saturation"))
    fraction = None
    if str(one["criterion_kind"].values) == "saturation_fraction":
        with np.errstate(invalid="ignore", divide="ignore"):
            fraction = threshold / level
    means = [
        [
            _mean_horizon(version, curves * np.exp(sign * mode)[:, np.newaxis], threshold,
                          fraction, span)
            for sign in (1, -1)
        ]
        for mode in modes
    ]  # fmt: skip
    return np.array([(up - down) / 2 for up, down in means])


def _mean_horizon(
    version: CalibratedVersion,
    curves: np.ndarray,
    threshold: np.ndarray,
    fraction: np.ndarray | None,
    span: tuple[float, float],
) -> float:
    """Mean of the horizons of curves (L, N) within the span, as `compare_horizons` counts them."""
    lead = version.curves["lead"].values.astype(float)
    if fraction is not None:
        threshold = fraction * _saturation(version, lead, curves)
    # Whether what does not cross grows does not matter: it is later than the end of the span.
    time, status = judge(
        lead, curves, threshold, version.hold, lambda rows: np.ones(rows.size, bool)
    )
    time = np.where(status == Status.at_start, span[0], np.where(np.isfinite(time), time, span[1]))
    there = status != Status.no_data
    return float(np.clip(time[there], *span).mean()) if there.any() else 0.0


def _saturation(version: CalibratedVersion, lead: np.ndarray, curves: np.ndarray) -> np.ndarray:
    selection = select_where_enough(lead, curves.T, version.law, version.scale)
    level = np.full(curves.shape[1], np.nan)
    for law, rows, parameters in chosen_groups(selection):
        level[rows] = law.saturation(parameters)
    return level


def _modes(factors: Factors, place: int) -> np.ndarray:
    """Independent modes (J, L) of the noise of ln(factor), each one standard deviation long."""
    error = np.sqrt(factors.log_variance[:, place]) / 2
    values, vectors = np.linalg.eigh(factors.correlation * np.outer(error, error))
    values, vectors = np.maximum(values[::-1], 0.0), vectors[:, ::-1]
    total = values.sum()
    if not total > 0:
        return np.empty((0, error.size))
    number = int(np.searchsorted(np.cumsum(values) / total, _KEPT)) + 1
    return np.asarray((vectors * np.sqrt(values)).T[:number])


def _known(version: CalibratedVersion, place: int, criterion: int) -> np.ndarray:
    status = version.curves["status"].isel({PLACE: place, CRITERION: criterion}).values
    return np.asarray(status != Status.no_data)


def _alike(a: Factors, b: Factors) -> bool:
    return all(
        np.array_equal(getattr(a, name), getattr(b, name), equal_nan=True)
        for name in ("factor", "log_variance", "correlation")
    )


def _dof(starts: int) -> float:
    """Degrees of freedom of the variance of a mean over so many starts (`serial.mean`), at most."""
    return float(np.clip(int(0.7 * starts ** (2 / 3)), 2, 24))
