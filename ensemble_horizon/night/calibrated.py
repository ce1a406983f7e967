"""Tonight's spread multiplied by the factors that past starts showed, their uncertainty with it."""

from __future__ import annotations

import logging
from collections.abc import Sequence
from dataclasses import dataclass, replace

import numpy as np
import xarray as xr

from ensemble_horizon.errors import ArgumentError, InputError, SettingsError
from ensemble_horizon.horizon.criteria import Chance
from ensemble_horizon.horizon.curve_limits import Curve
from ensemble_horizon.night.geometry import Geometry, geometry_of
from ensemble_horizon.night.mapping import FieldNoise, Fields
from ensemble_horizon.night.variables import Places, Variable
from ensemble_horizon.products.calibration_file import Calibration, read_calibration_file
from ensemble_horizon.runs import Catalogue
from ensemble_horizon.settings import Settings
from ensemble_horizon.skill import apply_calibration, calibration_on_grid
from ensemble_horizon.skill.factor import calibrated_noise
from ensemble_horizon.spread.sample import SampleLayout
from ensemble_horizon.spread.sampling import LeadNoise
from ensemble_horizon.vocabulary import LATITUDE, LEAD, LONGITUDE, PLACE

log = logging.getLogger(__name__)


@dataclass(frozen=True)
class Factors:
    """Factors at the leads of the runs for K places or points.

    Parameters
    ----------
    factor : (L, K), NaN where nothing was calibrated
    log_variance : (L, K) of ln(factor^2), zero where there is no factor
    correlation : (L, L) of its noise between leads
    """

    factor: np.ndarray
    log_variance: np.ndarray
    correlation: np.ndarray

    def noise(self, noise: LeadNoise, columns: np.ndarray | int) -> LeadNoise:
        """Noise of a spread with that of the factor, averaged over columns."""
        variance, known = self.log_variance[:, columns], np.isfinite(self.factor[:, columns])
        if variance.ndim > 1:
            # Points without a factor are not calibrated: they say nothing of its uncertainty.
            count = np.maximum(known.sum(axis=1), 1)
            variance = np.where(known, variance, 0.0).sum(axis=1) / count
        return calibrated_noise(noise, variance, self.correlation)


@dataclass(frozen=True)
class Calibrated:
    """Factors of one variable for its places, and for grid points where there are any."""

    places: Factors
    points: Factors | None

    def curves(self, curves: Sequence[Curve]) -> list[Curve]:
        """Curves of all places, calibrated."""
        return [
            replace(
                curve,
                spread=curve.spread * self.places.factor[:, number],
                noise=self.places.noise(curve.noise, number),
            )
            for number, curve in enumerate(curves)
        ]

    def fields(self, fields: Fields, layout: SampleLayout) -> Fields:
        """Fields at all points, calibrated; as they are where no point has a factor."""
        if self.points is None:
            return fields
        square = (self.points.factor**2).astype(fields.variance.dtype)
        blocks = tuple(
            self.points.noise(noise, np.flatnonzero(layout.block_of_point == number))
            for number, noise in enumerate(fields.noise.blocks)
        )
        whole = self.points.noise(fields.noise.whole, np.arange(square.shape[1]))
        return replace(fields, variance=fields.variance * square, noise=FieldNoise(blocks, whole))


def calibrated(
    settings: Settings,
    catalogue: Catalogue,
    places: Places,
    variables: Sequence[Variable],
    *,
    maps: bool,
) -> dict[str, Calibrated]:
    """What the calibration file of the settings says of each variable; nothing without one.

    Raises
    ------
    InputError
        if the file is none.
    SettingsError
        if it lacks a variable or a place, or leads as long as those of the runs, or a place of the
        same name lies elsewhere.
    """
    if settings.calibration is None:
        return {}
    path = str(settings.path(settings.calibration.file))
    held = read_calibration_file(path)
    missing = [item.name for item in variables if item.name not in held]
    if missing:
        raise SettingsError(
            "calibration.file",
            expected=f"factors for {', '.join(missing)}",
            found=f"{', '.join(held) or 'none'} in {path}",
            remedy="write the file by verify --calibration with the same variables",
        )
    _tell_own_starts([held[item.name] for item in variables], catalogue)
    geometry = geometry_of(settings, catalogue, places)
    for item in variables:
        _require_same_places(held[item.name], item.name, places, geometry, path)
    return {
        item.name: _one(held[item.name], item, catalogue, places, path, maps) for item in variables
    }


def _tell_own_starts(held: Sequence[Calibration], catalogue: Catalogue) -> None:
    """Warn where factors are applied to starts that they were found from."""
    known = {name for item in held for name in item.starts}
    labels = [catalogue.start_label(number) for number in range(catalogue.starts.size)]
    own = [label for label in labels if label in known]
    if own:
        log.warning(
            "calibration: %d of %d starts (%s%s) are among those that the factors were found from: "
            "their own errors are in the factors, so their calibrated limits prove nothing",
            len(own), len(labels), own[0], "" if len(own) == 1 else f" to {own[-1]}",
        )  # fmt: skip


def _require_same_places(
    held: Calibration, variable: str, places: Places, geometry: Geometry, path: str
) -> None:
    """Refuse factors of a place that has another's name.

    Raises
    ------
    SettingsError
    """
    _require_places(held, variable, places, path)
    if "box" not in held.places.coords:
        log.warning(
            "calibration of %s: %s is of an earlier version and does not say where its places lie, "
            "nor which starts it was found from: only names are compared; write it again by "
            "verify --calibration",
            variable, path,
        )  # fmt: skip
        return
    names = [name for name, _ in places.names]
    chosen = held.places.sel({PLACE: names})
    there = Geometry(chosen["box"].values, chosen["mean_position"].values)
    differs = geometry.differs(there)
    if not differs.any():
        return
    first = int(np.argmax(differs))
    where, other = geometry.words(first), there.words(first)
    if where == other:
        other += ", on a grid that covers another part of it"
    raise SettingsError(
        "calibration.file",
        expected=f"factors of {variable} for {names[first]} {where}",
        found=f"{names[first]} {other} in {path}",
        remedy="write the file by verify --calibration with the same regions and sites",
    )


def _require_places(held: Calibration, variable: str, places: Places, path: str) -> None:
    """Refuse a file that lacks a place.

    Raises
    ------
    SettingsError
    """
    names = [name for name, _ in places.names]
    there = held.places[PLACE].values.tolist()
    missing = [name for name in names if name not in there]
    if missing:
        raise SettingsError(
            "calibration.file",
            expected=f"factors of {variable} for {', '.join(missing)}",
            found=f"factors for {', '.join(there)} in {path}",
            remedy="write the file by verify --calibration with the same regions and sites",
        )


def _one(
    held: Calibration,
    variable: Variable,
    catalogue: Catalogue,
    places: Places,
    path: str,
    maps: bool,
) -> Calibrated:
    names = [name for name, _ in places.names]
    chosen = held.places.sel({PLACE: names})
    factors = _at_leads(chosen, catalogue, path)
    for name in [n for n, f in zip(names, factors.factor.T, strict=True) if np.isnan(f).all()]:
        log.warning(
            "calibration of %s: no factor for %s, so no limit is given there", variable.name, name
        )
    if any(isinstance(item, Chance) for item in variable.criteria.values()):
        log.warning("calibration of %s: chance criteria count members as they are", variable.name)
    if not maps:
        return Calibrated(factors, None)
    if held.cells is None or not {LATITUDE, LONGITUDE} <= set(catalogue.grid.coords):
        log.warning("calibration of %s: none for maps, which are as they were", variable.name)
        return Calibrated(factors, None)
    grid = catalogue.grid
    like = xr.DataArray(
        np.empty(grid.shape), dims=grid.dims,
        coords={name: grid.coords[name] for name in (LATITUDE, LONGITUDE)},
    )  # fmt: skip
    return Calibrated(factors, _at_leads(calibration_on_grid(held.cells, like), catalogue, path))


def _at_leads(held: xr.Dataset, catalogue: Catalogue, path: str) -> Factors:
    """Factors at the leads of the runs: their logarithms, and variances, between the leads held."""
    lead = catalogue.leads
    units = held[LEAD].attrs.get("units", catalogue.lead_units)
    if units != catalogue.lead_units:
        raise InputError(
            path,
            expected=f"leads in {catalogue.lead_units}",
            found=f"leads in {units}",
            remedy="calibrate with runs of the same kind",
        )
    one = xr.DataArray(np.ones(lead.size), dims=LEAD, coords={LEAD: lead})
    try:
        factor = apply_calibration(one, held)
    except ArgumentError as error:
        raise SettingsError(
            "calibration.file", expected=error.expected, found=error.found, remedy=error.remedy
        ) from error
    own = held[LEAD].values.astype(float)
    size = held["factor"].size // own.size
    log_variance = held["log_variance"].transpose(LEAD, ...).values.reshape(own.size, size)
    between = _between(own, lead)
    correlation = between @ held["noise_correlation"].values @ between.T
    scale = np.sqrt(np.maximum(np.diag(correlation), 1e-12))
    return Factors(
        factor.transpose(LEAD, ...).values.reshape(lead.size, size),
        between @ np.nan_to_num(log_variance),
        correlation / np.outer(scale, scale),
    )


def _between(held: np.ndarray, wanted: np.ndarray) -> np.ndarray:
    """Matrix (W, H) of linear interpolation."""
    return np.stack([np.interp(wanted, held, row) for row in np.eye(held.size)], axis=1)
