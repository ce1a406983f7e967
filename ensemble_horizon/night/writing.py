"""An estimate turned into products."""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence
from importlib.metadata import version
from pathlib import Path
from typing import Any

from ensemble_horizon.night.engine import Engine, usable_cores
from ensemble_horizon.night.estimate import Estimate, Progress, estimate, silent
from ensemble_horizon.night.products_folder import refuse_nights
from ensemble_horizon.night.verification.verifying import Verification
from ensemble_horizon.night.waiting import shares_of_estimate
from ensemble_horizon.products import Drawing, Ground, PlaceMark, load_plotting, write_products
from ensemble_horizon.settings import Settings

_CALIBRATED = (
    "the spread is multiplied by the factors from spread to error in {}, and their uncertainty is "
    "in the intervals"
)


def estimate_and_write(
    settings: Settings, progress: Progress = silent
) -> tuple[Estimate, list[Path]]:
    """Estimate by the settings and write all products to the folder they name.

    Raises
    ------
    InputError, SettingsError
        as `estimate`.
    ProductError
        if the folder cannot be written, or holds nights; nothing half-written is left.
    """
    folder = settings.path(settings.products.folder)
    refuse_nights(folder)
    found = estimate(settings, progress)
    return found, write_estimate(folder, settings, found, provenance(settings, found), progress)


def write_estimate(
    folder: Path,
    settings: Settings,
    found: Estimate,
    about: Mapping[str, Any],
    progress: Progress = silent,
) -> list[Path]:
    """Write all products of an estimate to a folder.

    Parameters
    ----------
    about : mapping
        See `products.netcdf.global_attributes`; a calibration in force is added.

    Raises
    ------
    ProductError
        if the folder cannot be written; nothing half-written is left.
    """
    note = calibration_note(settings)
    return write_products(
        folder,
        found.results,
        {**about, "calibration": note} if note else about,
        figures=settings.products.figures,
        ground=map_ground(settings),
        shares=shares_of_estimate(found.results),
        draw=drawn_by(settings.engine.workers, progress),
    )


def calibration_note(settings: Settings) -> str:
    """What a calibration in force means, in words; empty without one."""
    if settings.calibration is None:
        return ""
    return _CALIBRATED.format(settings.path(settings.calibration.file))


def drawn_by(workers: int | None, progress: Progress) -> Callable[[Sequence[Drawing]], None]:
    """A function that draws figures in worker processes, as many as there are cores by default."""

    def draw(drawings: Sequence[Drawing]) -> None:
        load_plotting()  # once, before workers are made as copies of this process
        with Engine(min(workers or usable_cores(), len(drawings))) as engine:
            for done, _ in enumerate(engine.run(_draw, drawings), start=1):
                progress("figures", done, len(drawings))

    return draw


def _draw(drawing: Drawing) -> None:
    drawing.draw()


def provenance(settings: Settings, found: Estimate | Verification) -> dict[str, Any]:
    """Where the products come from: inputs, settings, version."""
    return {
        "inputs": list(found.catalogue.paths),
        "settings": settings.text,
        "version": version("ensemble-horizon"),
        "title": settings.title,
    }


def map_ground(settings: Settings) -> Ground:
    """What the maps stand on: coasts, regions and sites."""
    regions, sites = settings.places()
    if not settings.regions:
        regions = ()  # the whole domain needs no outline
    boxes = [PlaceMark.box(r.name, r.west, r.east, r.south, r.north) for r in regions]
    marks = [PlaceMark.site(s.name, s.longitude, s.latitude) for s in sites]
    return Ground((*boxes, *marks), settings.products.coastline)
