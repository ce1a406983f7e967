"""An estimate turned into products."""

from __future__ import annotations

from collections.abc import Sequence
from importlib.metadata import version
from pathlib import Path
from typing import Any

from ensemble_horizon.night.engine import Engine, usable_cores
from ensemble_horizon.night.estimate import Estimate, Progress, estimate, silent
from ensemble_horizon.products import Drawing, PlaceMark, load_plotting, write_products
from ensemble_horizon.settings import Settings


def estimate_and_write(
    settings: Settings, progress: Progress = silent
) -> tuple[Estimate, list[Path]]:
    """Estimate by the settings and write all products to the folder they name.

    Raises
    ------
    InputError, SettingsError
        as `estimate`.
    ProductError
        if the folder cannot be written; nothing half-written is left.
    """
    found = estimate(settings, progress)
    workers = settings.engine.workers or usable_cores()

    def draw(drawings: Sequence[Drawing]) -> None:
        load_plotting()  # once, before workers are made as copies of this process
        with Engine(min(workers, len(drawings))) as engine:
            for done, _ in enumerate(engine.run(_draw, drawings), start=1):
                progress("figures", done, len(drawings))

    paths = write_products(
        settings.path(settings.products.folder),
        found.results,
        provenance(settings, found),
        figures=settings.products.figures,
        places=_marks(settings),
        draw=draw,
    )
    return found, paths


def _draw(drawing: Drawing) -> None:
    drawing.draw()


def provenance(settings: Settings, found: Estimate) -> dict[str, Any]:
    """Where the products come from: inputs, settings, version."""
    return {
        "inputs": list(found.catalogue.paths),
        "settings": settings.text,
        "version": version("ensemble-horizon"),
        "title": settings.title,
    }


def _marks(settings: Settings) -> list[PlaceMark]:
    regions, sites = settings.places()
    if not settings.regions:
        regions = ()  # the whole domain needs no outline
    boxes = [PlaceMark.box(r.name, r.west, r.east, r.south, r.north) for r in regions]
    return boxes + [PlaceMark.site(s.name, s.longitude, s.latitude) for s in sites]
