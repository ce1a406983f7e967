"""From a verification to the factors that turn tonight's spread into an error to expect."""

from __future__ import annotations

import logging
from collections.abc import Sequence

import numpy as np
import xarray as xr

from ensemble_horizon.errors import ArgumentError, InputError
from ensemble_horizon.night.geometry import geometry_of
from ensemble_horizon.night.variables import resolve_places
from ensemble_horizon.night.verification.cells import cell_middles
from ensemble_horizon.night.verification.results import VerifiedResult
from ensemble_horizon.night.verification.scores import series_of
from ensemble_horizon.night.verification.verifying import Verification
from ensemble_horizon.products.calibration_file import Calibration
from ensemble_horizon.runs import Catalogue
from ensemble_horizon.settings import Settings
from ensemble_horizon.skill import calibration_factor
from ensemble_horizon.skill.consistency import EXPECTED, SQUARED
from ensemble_horizon.skill.reduction import ScoreSums
from ensemble_horizon.vocabulary import CELL, LATITUDE, LEAD, LONGITUDE, PLACE, START

# Neighbourhoods of a coarse cell, tried in turn where its own starts are too few.
RADII_KM = (500.0, 1000.0, 2000.0, 4000.0)

log = logging.getLogger(__name__)


def calibrations(settings: Settings, found: Verification) -> dict[str, Calibration]:
    """Factors of all variables, for regions, sites and coarse cells of the grid.

    A site that is observed is calibrated by its observations, any other by the analyses of its
    grid point.

    Raises
    ------
    InputError
        if the starts are too few everywhere: the message says how many are needed.
    """
    return {
        result.frame.variable: _calibration(settings, result, found.catalogue)
        for result in found.results
    }


def _calibration(settings: Settings, result: VerifiedResult, runs: Catalogue) -> Calibration:
    wanted = settings.verification.factor_uncertainty
    confidence = settings.growth.confidence
    name = result.frame.variable
    pair = _pair_of_places(result, runs)
    try:
        places = calibration_factor(pair, wanted=wanted, confidence=confidence)
    except ArgumentError as error:
        raise InputError(
            f"calibration of {name}",
            expected=error.expected,
            found=error.found,
            remedy=error.remedy.replace("wanted=", "verification.factor_uncertainty"),
        ) from error
    for row, place in enumerate(places[PLACE].values):
        one = places.isel({PLACE: row})
        if not np.isfinite(one["factor"]).any():
            log.warning(
                "calibration of %s: none for %s, whose %d starts do not make the factor certain to "
                "%g; about %d are needed",
                name, place, int(one["starts"].max()), wanted, int(one["starts_needed"]),
            )  # fmt: skip
    return Calibration(
        _located(places, settings, runs),
        _cells(result, runs, name, wanted, confidence),
        _starts(pair),
    )


def _located(factors: xr.Dataset, settings: Settings, runs: Catalogue) -> xr.Dataset:
    """The factors, and where their places lie."""
    places = resolve_places(settings, runs)
    names = [name for name, _ in places.names]
    rows = [names.index(name) for name in factors[PLACE].values]
    box, mean = geometry_of(settings, runs, places)
    return factors.assign_coords(
        box=((PLACE, "edge"), box[rows]), mean_position=((PLACE, "axis"), mean[rows])
    )


def _starts(pair: xr.Dataset) -> tuple[str, ...]:
    """Names of the starts that bring anything."""
    both = pair[EXPECTED].notnull() & pair[SQUARED].notnull()
    there = both.any([LEAD, PLACE]).values
    return tuple(str(name) for name in pair[START].values[there])


def _pair_of_places(result: VerifiedResult, runs: Catalogue) -> xr.Dataset:
    rows: dict[str, tuple[np.ndarray, np.ndarray, str]] = {}
    for against, sums in result.series.items():
        expected, squared = series_of(sums, EXPECTED), series_of(sums, SQUARED)
        for column, (name, _) in enumerate(result.kinds[against]):
            rows[name] = (expected[..., column], squared[..., column], against)
    values = [np.stack([row[k] for row in rows.values()], axis=-1) for k in (0, 1)]
    pair = _pair(values, result, runs, PLACE)
    return pair.assign_coords(
        {PLACE: list(rows), "against": (PLACE, [row[2] for row in rows.values()])}
    )


def _cells(
    result: VerifiedResult, runs: Catalogue, name: str, wanted: float, confidence: float
) -> xr.Dataset | None:
    """Factors of coarse cells of the grid; None where there are none."""
    sums: Sequence[ScoreSums] = result.series.get("analysis", ())
    first = len(result.kinds.get("analysis", ()))
    if not sums or sums[0].sums.shape[2] == first:
        return None
    values = [series_of(sums, item)[..., first:] for item in (EXPECTED, SQUARED)]
    latitude, longitude = cell_middles(runs)
    pair = _pair(values, result, runs, CELL)
    pair = pair.assign_coords({LATITUDE: (CELL, latitude), LONGITUDE: (CELL, longitude)})
    try:
        return calibration_factor(pair, radii_km=RADII_KM, wanted=wanted, confidence=confidence)
    except ArgumentError as error:
        log.warning("calibration of %s: none for maps: %s", name, error.found)
        return None


def _pair(
    values: list[np.ndarray], result: VerifiedResult, runs: Catalogue, dimension: str
) -> xr.Dataset:
    dims = (START, LEAD, dimension)
    labels = [runs.start_label(number) for number in range(runs.starts.size)]
    coords = {START: labels, LEAD: result.frame.lead_axis}
    return xr.Dataset(dict(zip((EXPECTED, SQUARED), ((dims, v) for v in values), strict=True)),
                      coords=coords)  # fmt: skip
