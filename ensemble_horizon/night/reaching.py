"""Reach from stored products: the fitted laws of ``horizons.nc`` asked what-if questions."""

from __future__ import annotations

import logging
from collections.abc import Sequence
from dataclasses import dataclass
from pathlib import Path

import numpy as np
import xarray as xr

from ensemble_horizon.errors import InputError, SettingsError
from ensemble_horizon.growth import LAWS, doubling_at
from ensemble_horizon.horizon import reach
from ensemble_horizon.products.netcdf import valid_name
from ensemble_horizon.products.wording import start_text
from ensemble_horizon.runs.handles import diagnose
from ensemble_horizon.settings import Settings
from ensemble_horizon.vocabulary import PLACE, START

log = logging.getLogger(__name__)

_SIZES = 6
_NEEDED = {"law", "spread", "initial_error", "saturation", "growth_rate", "doubling_time",
           "place_name"}  # fmt: skip


@dataclass(frozen=True)
class Reach:
    """What-if answers for one variable and place.

    bought : Dataset of `ensemble_horizon.horizon.reach.reach`
    sizes, doubling : (S,) error sizes and the time each takes to double under the law
    """

    variable: str
    place: str
    law: str
    units: str
    lead_units: str
    start: str
    initial_error: float
    last_lead: float
    bought: xr.Dataset
    sizes: np.ndarray
    doubling: np.ndarray


def reach_of_products(
    settings: Settings,
    variable: str,
    place: str | None,
    tolerances: Sequence[float],
    factors: Sequence[float],
) -> list[Reach]:
    """Answers for one variable at one place, or at all of them.

    From the fit pooled over starts where the estimate had several.

    Raises
    ------
    InputError
        if there is no ``horizons.nc`` yet, or it cannot be read.
    SettingsError
        if the variable or the place is not in it.
    """
    path = settings.path(settings.products.folder) / "horizons.nc"
    if variable not in settings.variables:
        raise _unknown("--variable", variable, list(settings.variables))
    try:
        with xr.open_dataset(path, decode_timedelta=False) as stored:
            if stored.attrs.get("settings") != settings.text:
                log.warning("%s was made with other settings: estimate again to be sure", path)
            fits = _fits(stored.load(), list(settings.variables), variable)
    except (OSError, ValueError, RuntimeError) as error:
        raise _no_products(path, diagnose(str(path), error).found) from error
    lacking = _NEEDED - set(map(str, fits.variables))
    if lacking:
        raise _no_products(path, f"no fits of {variable}, which the last estimate did not know")
    names = [str(name) for name in fits["place_name"].values]
    if place is not None and place not in names:
        raise _unknown("--place", place, names)
    chosen = [number for number, name in enumerate(names) if place in (None, name)]
    return [_answer(fits.isel({PLACE: number}), variable, tolerances, factors) for number in chosen]


def _fits(stored: xr.Dataset, variables: list[str], variable: str) -> xr.Dataset:
    taken: set[str] = set()
    prefixes = {name: valid_name(name, taken) for name in variables}
    prefix = f"{prefixes[variable]}_"
    if f"{prefix}pooled_law" in stored:
        prefix = f"{prefix}pooled_"
    own = {name: name.removeprefix(prefix) for name in map(str, stored) if name.startswith(prefix)}
    fits = stored[list(own)].rename(own)
    return fits.isel({START: -1}) if START in fits.dims else fits


def _start_of(fit: xr.Dataset) -> str:
    return start_text(fit[START].values[()]) if START in fit.coords else "all starts pooled"


def _answer(
    fit: xr.Dataset, variable: str, tolerances: Sequence[float], factors: Sequence[float]
) -> Reach:
    bought = reach(fit, tolerance=tolerances, error_factor=factors)
    names = str(fit["law"].attrs["flag_meanings"]).split()
    law = names[int(fit["law"])]
    initial = float(fit["initial_error"])
    top = float(fit["saturation"]) / 2
    if not np.isfinite(top):
        top = float(fit["spread"].max())
    sizes = np.geomspace(initial, max(top, initial), _SIZES) if law in LAWS else np.empty(0)
    doubling = np.array([float(doubling_at(fit, size)) for size in sizes])
    return Reach(
        variable=variable,
        place=str(fit["place_name"].values),
        law=law,
        units=str(fit["initial_error"].attrs.get("units", "1")),
        lead_units=str(fit["doubling_time"].attrs.get("units", "1")),
        start=_start_of(fit),
        initial_error=initial,
        last_lead=float(fit["lead"].max()),
        bought=bought,
        sizes=sizes,
        doubling=doubling,
    )


def _no_products(path: Path, found: str) -> InputError:
    return InputError(
        str(path),
        expected="the products of an estimate with these settings",
        found=found,
        remedy="run the estimate command with this settings file first",
    )


def _unknown(what: str, name: str, known: list[str]) -> SettingsError:
    return SettingsError(
        what, expected=f"one of {', '.join(known)}", found=repr(name), remedy="correct the name"
    )
