"""A verification turned into products."""

from __future__ import annotations

from pathlib import Path
from typing import Any

from ensemble_horizon.night.estimate import Progress, silent
from ensemble_horizon.night.verification.calibrating import calibrations
from ensemble_horizon.night.verification.verifying import Verification, verify
from ensemble_horizon.night.writing import drawn_by, map_ground, provenance
from ensemble_horizon.products.calibration_file import write_calibration_file
from ensemble_horizon.products.score_folder import write_scores
from ensemble_horizon.settings import Settings


def verify_and_write(
    settings: Settings, calibration: str | None = None, progress: Progress = silent
) -> tuple[Verification, list[Path]]:
    """Verify by the settings and write all products to the folder they name.

    Parameters
    ----------
    settings : Settings
    calibration : str, optional
        Where to write factors from spread to error, for ``estimate``.
    progress : callable

    Raises
    ------
    InputError, SettingsError
        as `verify`, and as `calibrations` where a calibration is asked for.
    ProductError
        if the folder cannot be written; nothing half-written is left.
    """
    found = verify(settings, progress, cells=calibration is not None)
    factors = None if calibration is None else calibrations(settings, found)
    about: dict[str, Any] = provenance(settings, found)
    about["inputs"] = [*about["inputs"], *found.analyses]
    catalogue = found.catalogue
    last = catalogue.starts.size - 1
    about["starts"] = f"{catalogue.start_label(0)} to {catalogue.start_label(last)}"
    notes = [*map(str, found.gaps), *found.left_out]
    if notes:
        about["not_verified"] = "; ".join(notes)
    paths = write_scores(
        settings.path(settings.products.folder),
        found.results,
        about,
        notes=notes,
        figures=settings.products.figures,
        ground=map_ground(settings),
        draw=drawn_by(settings.engine.workers, progress),
    )
    if calibration is not None and factors is not None:
        paths.append(write_calibration_file(calibration, factors, about))
    return found, paths
