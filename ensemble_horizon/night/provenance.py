"""Where products that stand there come from: their settings, their time, their calibration."""

from __future__ import annotations

import tomllib
from collections.abc import Iterator, Mapping
from datetime import UTC, datetime
from pathlib import Path
from typing import Any

import netCDF4

from ensemble_horizon.errors import InputError, SettingsError
from ensemble_horizon.products.folder import PROGRAM, README
from ensemble_horizon.settings import Settings
from ensemble_horizon.settings.reading import settings_from

# What the numbers of an estimate follow from; the rest may change without making them untrue.
_TELLING = ("runs", "variables", "regions", "sites", "growth", "climatology", "calibration")
_NAMED = 4


def provenance_of(folder: Path) -> dict[str, str]:
    """Return the global attributes of ``horizons.nc`` in a folder of products.

    Raises
    ------
    InputError
        If it is missing or cannot be read.
    """
    path = folder / "horizons.nc"
    try:
        with netCDF4.Dataset(path) as file:
            return {name: str(file.getncattr(name)) for name in file.ncattrs()}
    except (OSError, RuntimeError) as error:
        found = str(error) if path.exists() else f"no such file{_other_kind(folder)}"
        raise InputError(
            str(path),
            expected="the limits as `estimate` writes them",
            found=found,
            remedy="run `estimate` with these settings first, or name its folder in "
            "products.folder",
        ) from error


def _other_kind(folder: Path) -> str:
    """What the folder holds instead, if it is one of ours."""
    if any(folder.glob("*/night.json")):
        return " beside the nights of `nightly`, which have their briefings in their folders"
    try:
        title = (folder / README).read_text(encoding="utf-8").partition("\n")[0].strip()
    except (OSError, UnicodeDecodeError):
        return ""
    return f" in a folder of: {title}" if title.endswith(PROGRAM) else ""


def require_same_settings(folder: Path, about: Mapping[str, str], settings: Settings) -> None:
    """Refuse products of other settings: places, criteria and names would not be theirs.

    Raises
    ------
    InputError
        Naming the keys that differ.
    """
    try:
        table = tomllib.loads(about.get("settings", ""))
        stored = settings_from(table, base=settings.base)
    except (tomllib.TOMLDecodeError, SettingsError):
        different = ["settings that cannot be told"]
    else:
        different = list(_differences(_telling(stored), _telling(settings)))
    if different:
        more = f" and {len(different) - _NAMED} more" if len(different) > _NAMED else ""
        raise InputError(
            str(folder / "horizons.nc"),
            expected="products of these settings",
            found=f"products of others: {', '.join(different[:_NAMED])}{more}",
            remedy="run `estimate` again, or name the settings that the products were made by",
        )


def _telling(settings: Settings) -> dict[str, Any]:
    return settings.model_dump(include=set(_TELLING), exclude_none=True)


def _differences(
    one: Mapping[str, Any], other: Mapping[str, Any], above: str = ""
) -> Iterator[str]:
    """Yield the keys in which two tables differ."""
    for key in [*one, *(key for key in other if key not in one)]:
        a, b = one.get(key), other.get(key)
        if isinstance(a, Mapping) and isinstance(b, Mapping):
            yield from _differences(a, b, f"{above}{key}.")
        elif a != b:
            yield f"{above}{key}"


def time_of_making(folder: Path, about: Mapping[str, str]) -> datetime:
    """Return when the products were made, UTC.

    Raises
    ------
    InputError
        If they do not tell.
    """
    stamp = about.get("history", "").partition(" ")[0]
    try:
        return datetime.strptime(stamp, "%Y-%m-%dT%H:%M:%SZ").replace(tzinfo=UTC)
    except ValueError as error:
        raise InputError(
            str(folder / "horizons.nc"),
            expected="a history that begins with the time of making",
            found=repr(about.get("history", "")),
            remedy="run `estimate` again",
        ) from error


def calibration_words(about: Mapping[str, str]) -> list[str]:
    """Return the sentence on the calibration in force, if there is one."""
    words = about.get("provenance_calibration", "")
    return [f"Calibration in force: {words}."] if words else []
