"""Reading a settings file: every mistake at once, each with its key."""

from __future__ import annotations

import copy
from collections.abc import Iterable
from contextlib import suppress
from pathlib import Path
from typing import Any

from pydantic import ValidationError

from ensemble_horizon.errors import EnsembleHorizonError
from ensemble_horizon.settings.criteria import (
    ChanceTable,
    CriterionTable,
    Table,
    criterion_of,
    has_text,
)
from ensemble_horizon.settings.mistakes import mistake, read_toml, refuse_mistakes
from ensemble_horizon.settings.tables import (
    AnalysesTable,
    CalibrationTable,
    ClimatologyTable,
    EngineTable,
    GrowthTable,
    NightTable,
    ObservationsTable,
    ProductsTable,
    RegionTable,
    RunsTable,
    Settings,
    SiteTable,
    VariableTable,
    VerificationTable,
)
from ensemble_horizon.spread import Region, Site


def read_settings(path: str | Path) -> Settings:
    """Read and check a settings file.

    Raises
    ------
    SettingsError
        if the file cannot be read, is no TOML, or holds mistakes; all mistakes in one message.
    """
    table, text = read_toml(path)
    return settings_from(table, base=Path(path).resolve().parent, text=text, name=str(path))


def settings_from(
    table: dict[str, Any], *, base: Path | None = None, text: str = "", name: str = "settings"
) -> Settings:
    """Check a settings table that is already in memory.

    Raises
    ------
    SettingsError
        listing every mistake with its key.

    Examples
    --------
    >>> settings_from({"runs": {"files": "a.nc"}, "variables": {}, "products": {"folder": "out"}})
    Traceback (most recent call last):
    ...
    ensemble_horizon.errors.SettingsError: settings: expected settings without mistakes; found 1:
      variables: at least 1 item, not 0. Next: correct it and run again.
    """
    own = {"base": base or Path(), "text": text}
    hidden = [key for key in own if key in table]
    given = {key: value for key, value in table.items() if key not in own}
    mistakes: list[str] = []
    try:
        settings = Settings.model_validate({**given, **own})
    except ValidationError as error:
        errors = error.errors(include_url=False)
        mistakes += [mistake(item, _known_keys) for item in errors]
        with suppress(ValidationError):
            mistakes += _cross_checks(Settings.model_validate(_sound_part(given, errors)))
    else:
        mistakes += _cross_checks(settings)
    mistakes += [f"{key}: unknown key" for key in hidden]
    refuse_mistakes(name, mistakes)
    return settings


def _sound_part(table: dict[str, Any], errors: list[Any]) -> dict[str, Any]:
    """The settings without what is at fault, so that the rest can be held against itself."""
    sound = copy.deepcopy(table)
    for item in errors:
        loc = item["loc"]
        if loc[0] == "variables" and loc[2:3] == ("criteria",):
            _stand_in(sound["variables"].get(loc[1], {}), loc[3:4])
            continue
        depth = 3 if loc[0] == "variables" else 2
        *above, last = loc if item["type"] == "extra_forbidden" else loc[:depth]
        node: Any = sound
        for part in above:
            node = node.get(part, {}) if isinstance(node, dict) else {}
        if isinstance(node, dict):
            node.pop(last, None)
    for key, field, value in (("runs", "files", ""), ("products", "folder", "")):
        sound.setdefault(key, {}).setdefault(field, value)
    if not sound.get("variables"):
        sound["variables"] = {"": {"criteria": [{"tolerance": 1.0}]}}
    return sound


def _stand_in(variable: dict[str, Any], position: tuple[int, ...]) -> None:
    """Put a sound criterion where one is at fault; the others keep their numbers."""
    criteria = variable.get("criteria")
    if position and isinstance(criteria, list):
        criteria[position[0]] = {"name": f"\0{position[0]}", "tolerance": 1.0}
    else:
        variable["criteria"] = [{"tolerance": 1.0}]


def _cross_checks(settings: Settings) -> list[str]:
    """Mistakes that show only when tables are held against one another."""
    found = []
    doubled = set(settings.regions) & set(settings.sites)
    found += [f"sites.{name}: a region has the same name" for name in sorted(doubled)]
    for kind, tables in (("regions", settings.regions), ("sites", settings.sites)):
        for name, table in tables.items():
            try:
                (Region if kind == "regions" else Site)(name, **table.model_dump())
            except EnsembleHorizonError as error:
                found.append(f"{kind}.{name}: expected {error.expected}, found {error.found}")
    found += _strange_names(settings)
    found += _names_with_nul(settings)
    found += _folders_in_one_another(settings)
    for name, variable in settings.variables.items():
        labels: set[str] = set()
        for number, item in enumerate(variable.criteria):
            key = f"variables.{name}.criteria[{number}]"
            if item.climatology_fraction is not None and settings.climatology is None:
                found.append(f"{key}.climatology_fraction: needs a [climatology] file")
            if variable.units is not None or not has_text(item):
                try:
                    criterion = criterion_of(item, variable.units or "1", key)
                except EnsembleHorizonError as error:
                    found.append(f"{error.culprit}: expected {error.expected}, found {error.found}")
                    continue
                label = item.name or criterion.label
                if label in labels:
                    found.append(f"{key}.name: a second {label!r}; every criterion has its own")
                labels.add(label)
    return found


def _strange_names(settings: Settings) -> list[str]:
    """Analyses and observations of variables that the settings do not name."""
    given = {"observations": list(settings.observations)}
    if settings.analyses is not None:
        given["analyses.names"] = list(settings.analyses.names)
    if settings.climatology is not None:
        given["climatology.mean_names"] = list(settings.climatology.mean_names)
    known = ", ".join(settings.variables)
    return [
        f"{key}.{name}: no variable of that name; there are {known}"
        for key, names in given.items()
        for name in names
        if name not in settings.variables
    ]


def _names_with_nul(settings: Settings) -> list[str]:
    """Names that would be cut off, as text in NetCDF files ends at the character NUL."""
    tables: dict[str, Iterable[str]] = {
        "variables": settings.variables, "regions": settings.regions, "sites": settings.sites,
    }  # fmt: skip
    return [
        f"{key}.{name.replace(chr(0), '<NUL>')}: a name without the character NUL"
        for key, names in tables.items()
        for name in names
        if "\0" in name
    ]


def _folders_in_one_another(settings: Settings) -> list[str]:
    """Archive and products in one folder, or one inside the other."""
    if settings.night is None or not (settings.night.archive and settings.products.folder):
        return []
    archive = settings.path(settings.night.archive).resolve()
    products = settings.path(settings.products.folder).resolve()
    if archive == products:
        where = "is the folder of products.folder"
    elif archive.is_relative_to(products):
        where = "lies inside that of products.folder"
    elif products.is_relative_to(archive):
        where = "holds that of products.folder"
    else:
        return []
    return [f"night.archive: a folder beside products.folder; {archive} {where}, {products}"]


def _known_keys(loc: tuple[int | str, ...]) -> list[str]:
    tables: dict[str, type[Table]] = {
        "runs": RunsTable,
        "variables": VariableTable,
        "regions": RegionTable,
        "sites": SiteTable,
        "growth": GrowthTable,
        "climatology": ClimatologyTable,
        "analyses": AnalysesTable,
        "observations": ObservationsTable,
        "verification": VerificationTable,
        "calibration": CalibrationTable,
        "night": NightTable,
        "engine": EngineTable,
        "products": ProductsTable,
    }
    if len(loc) == 1:
        return [name for name in Settings.model_fields if name not in ("base", "text")]
    table = tables[str(loc[0])]
    if "criteria" in loc:
        table = ChanceTable if "chance" in loc[:-1] else CriterionTable
    return list(table.model_fields)
