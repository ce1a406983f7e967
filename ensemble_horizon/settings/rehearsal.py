"""The settings file of a rehearsal: a twin experiment and the archive it is written to."""

from __future__ import annotations

import hashlib
import json
import os
from datetime import datetime
from importlib.metadata import version
from pathlib import Path
from typing import Annotated, Any, Literal

from pydantic import Field, ValidationError, field_validator, model_validator

from ensemble_horizon.errors import ArgumentError
from ensemble_horizon.settings.criteria import Fraction, Positive, Table
from ensemble_horizon.settings.mistakes import mistake, read_toml, refuse_mistakes
from ensemble_horizon.settings.tables import EngineTable
from ensemble_horizon.toys import (
    Displacement,
    FieldPlan,
    ModelVersion,
    System,
    TwinExperiment,
    system,
)

NotNegative = Annotated[float, Field(ge=0, allow_inf_nan=False)]
# A climatology needs the attractor several times over, not only the weeks of the starts.
CLIMATE_SPIN_UPS = 5.0
Count = Annotated[int, Field(ge=1)]


class SystemTable(Table):
    """``[system]``: which toy system makes the truth; times in its own units."""

    name: str
    parameters: dict[str, float] = Field(default_factory=dict)
    dt: Positive | None = None


class VersionTable(Table):
    """``[versions.NAME]``: what differs from the system of the truth."""

    name: str | None = None
    parameters: dict[str, float] = Field(default_factory=dict)
    dt: Positive | None = None


class TruthTable(Table):
    """``[truth]``: what runs before the first start, and the clock of a system without one."""

    spin_up: NotNegative | None = None
    climate: NotNegative | None = None
    hours_per_time_unit: Positive | None = None


class DisplacementTable(Table):
    """``[analyses]`` or ``[perturbations]``: structure and size of the displacements."""

    method: str = "gaussian"
    amplitude: NotNegative | None = None
    norm: str = "euclidean"
    paired: bool = False
    options: dict[str, float | int | list[float]] = Field(default_factory=dict)

    def displacement(self) -> Displacement:
        """Return the record that the experiment works with."""
        return Displacement(**self.model_dump())


class ForecastTable(Table):
    """``[forecast]``: starts, leads, members, and the seed of all random numbers."""

    starts: Count
    start_spacing: Positive
    leads: Annotated[int, Field(ge=2)]
    lead_spacing: Positive
    members: Annotated[int, Field(ge=2)]
    control: bool = False
    seed: Annotated[int, Field(ge=0)] = 0


class ArchiveTable(Table):
    """``[archive]``: where the runs are written, and in which layout."""

    folder: str
    layout: Literal["start", "member"] = "start"
    fields: tuple[str, ...] = ()
    grid: tuple[Count, Count] | None = None
    precision: Literal["float32", "float64"] = "float32"
    compression: Annotated[int, Field(ge=0, le=9)] = 1
    first_start: str = "2031-02-14T00:00"

    @field_validator("first_start")
    @classmethod
    def _date(cls, value: str) -> str:
        try:
            found = datetime.fromisoformat(value)
        except ValueError as error:
            raise ValueError("a date such as 2031-02-14T00:00") from error
        if found.tzinfo is not None:
            raise ValueError("a date in UTC without an offset, such as 2031-02-14T00:00")
        return value


class CriteriaTable(Table):
    """``[criteria]`` of the ready-made settings for ``estimate``; tolerances by field."""

    climatology_fraction: Positive | None = None
    saturation_fraction: Fraction | None = None
    tolerances: dict[str, Positive] = Field(default_factory=dict)

    @model_validator(mode="after")
    def _some(self) -> CriteriaTable:
        if not (self.climatology_fraction or self.saturation_fraction or self.tolerances):
            raise ValueError(
                "at least one of climatology_fraction, saturation_fraction, tolerances"
            )
        return self


class Rehearsal(Table):
    """A whole settings file of a rehearsal. Relative paths count from the folder of the file."""

    title: str = "Rehearsal"
    system: SystemTable
    truth: TruthTable = Field(default_factory=TruthTable)
    analyses: DisplacementTable
    perturbations: DisplacementTable | None = None
    forecast: ForecastTable
    versions: dict[str, VersionTable] = Field(default_factory=lambda: {"A": VersionTable()})
    archive: ArchiveTable
    criteria: CriteriaTable = CriteriaTable(climatology_fraction=0.5, saturation_fraction=0.5)
    engine: EngineTable = Field(default_factory=EngineTable)

    base: Path = Field(default=Path(), exclude=True)
    text: str = Field(default="", exclude=True)

    @property
    def folder(self) -> Path:
        """Where the archive stands."""
        return Path(os.path.normpath(self.base / self.archive.folder))

    @property
    def first_start(self) -> datetime:
        """Nominal date of the first start."""
        return datetime.fromisoformat(self.archive.first_start)

    def experiment(self) -> TwinExperiment:
        """Return the experiment.

        Raises
        ------
        ArgumentError
            if the settings do not fit one another.
        """
        perturbations = None if self.perturbations is None else self.perturbations.displacement()
        truth = system(self.system.name, **self.system.parameters)
        before = self.truth.model_dump()
        if self.truth.climate is None:
            before["climate"] = CLIMATE_SPIN_UPS * truth.spin_up
        return TwinExperiment(
            system=truth,
            versions={name: self._version(table) for name, table in self.versions.items()},
            analyses=self.analyses.displacement(),
            perturbations=perturbations,
            dt=self.system.dt,
            **before,
            **self.forecast.model_dump(),
        )

    def plan(self, experiment: TwinExperiment) -> FieldPlan:
        """Return which fields are kept where; without a list, those that all versions have."""
        names = self.archive.fields
        if not names:
            systems = [experiment.system, *(item.system for item in experiment.versions.values())]
            known = [_field_names(item) for item in systems]
            names = tuple(name for name in known[0] if all(name in other for other in known))
        return FieldPlan(experiment.system, names, self.archive.grid)

    def fingerprint(self) -> str:
        """Return a digest of all that the numbers in the archive follow from."""
        table = self.model_dump(mode="json", exclude={"title", "engine", "criteria"})
        del table["archive"]["folder"]
        table["version"] = version("ensemble-horizon")
        text = json.dumps(table, sort_keys=True)
        return hashlib.sha256(text.encode()).hexdigest()

    def _version(self, table: VersionTable) -> ModelVersion:
        own = table.name is None or table.name == self.system.name
        parameters = {**self.system.parameters, **table.parameters} if own else table.parameters
        return ModelVersion(system(table.name or self.system.name, **parameters), table.dt)


def read_rehearsal(path: str | Path) -> Rehearsal:
    """Read and check a settings file of a rehearsal.

    Raises
    ------
    SettingsError
        if the file cannot be read, is no TOML, or holds mistakes; all mistakes in one message.
    """
    table, text = read_toml(path)
    return rehearsal_from(table, base=Path(path).resolve().parent, text=text, name=str(path))


def rehearsal_from(
    table: dict[str, Any], *, base: Path | None = None, text: str = "", name: str = "settings"
) -> Rehearsal:
    """Check the settings of a rehearsal that are already in memory.

    Raises
    ------
    SettingsError
        listing every mistake with its key.

    Examples
    --------
    >>> rehearsal_from({
    ...     "system": {"name": "lorenz-63", "parameters": {"roh": 30.0}},
    ...     "analyses": {"amplitude": 0.1}, "archive": {"folder": "out"},
    ...     "forecast": {"starts": 2, "start_spacing": 1.0, "leads": 5, "lead_spacing": 0.5,
    ...                  "members": 3},
    ... })
    Traceback (most recent call last):
    ...
    ensemble_horizon.errors.SettingsError: settings: expected settings without mistakes; found 1:
      system.parameters.roh: parameter of lorenz-63: expected one of sigma, rho, beta, found 'roh';
      did you mean 'rho'? Next: correct it and run again.
    """
    own = {"base": base or Path(), "text": text}
    hidden = [f"{key}: unknown key" for key in own if key in table]
    given = {key: value for key, value in table.items() if key not in own}
    try:
        found = Rehearsal.model_validate({**given, **own})
    except ValidationError as error:
        errors = error.errors(include_url=False)
        refuse_mistakes(name, [*(mistake(item, _known_keys) for item in errors), *hidden])
        raise
    refuse_mistakes(name, [*_cross_checks(found), *hidden])
    return found


def _cross_checks(settings: Rehearsal) -> list[str]:
    """Mistakes that show only when the tables are held against the toy systems."""
    found: list[str] = []
    truth = _system_of(settings.system.name, settings.system.parameters, "system", found)
    for key, table in settings.versions.items():
        if table.name is not None or truth is not None:
            name = table.name or settings.system.name
            _system_of(name, table.parameters, f"versions.{key}", found)
        if not key.isidentifier():
            found.append(f"versions.{key}: a name of letters, digits and underscores, for a file")
    if truth is not None:
        for key in ("analyses", "perturbations"):
            displacement = getattr(settings, key)
            if displacement is not None:
                _attempt(key, lambda d=displacement: d.displacement().check(truth), found)
    key = "analyses" if settings.perturbations is None else "perturbations"
    if getattr(settings, key).amplitude == 0:
        found.append(f"{key}.amplitude: above zero, or all members are one run; found 0")
    if found:
        return found
    _attempt("forecast", settings.experiment, found)
    if not found:
        experiment = settings.experiment()
        _attempt("archive", lambda: _fields_exist(settings, experiment), found)
    return found


def _fields_exist(settings: Rehearsal, experiment: TwinExperiment) -> None:
    plan = settings.plan(experiment)
    for model in experiment.versions.values():
        plan.fields(model.system, model.system.default_state())


def _system_of(
    name: str, parameters: dict[str, float], key: str, found: list[str]
) -> System | None:
    """Return the system, noting every unknown or unacceptable parameter on its own."""
    made: list[System] = []
    if not _attempt(f"{key}.name", lambda: made.append(system(name)), found):
        return None
    sound = True
    for parameter, value in parameters.items():
        where = f"{key}.parameters.{parameter}"
        sound &= _attempt(where, lambda p=parameter, v=value: system(name, **{p: v}), found)
    return system(name, **parameters) if sound else None


def _attempt(key: str, action: Any, found: list[str]) -> bool:
    """Note under ``key`` what ``action`` refuses; whether it went well."""
    try:
        action()
    except ArgumentError as error:
        what = "" if key.rpartition(".")[2] in error.culprit.split() else f"{error.culprit}: "
        found.append(f"{key}: {what}expected {error.expected}, found {error.found}; {error.remedy}")
        return False
    return True


def _field_names(item: System) -> list[str]:
    return [field.name for field in item.fields_of(item.default_state())]


def _known_keys(loc: tuple[int | str, ...]) -> list[str]:
    """Keys known beside the last part of ``loc``."""
    table = Rehearsal if len(loc) == 1 else _TABLES[str(loc[0])]
    return [key for key in table.model_fields if key not in ("base", "text")]


_TABLES: dict[str, type[Table]] = {
    "system": SystemTable,
    "truth": TruthTable,
    "analyses": DisplacementTable,
    "perturbations": DisplacementTable,
    "forecast": ForecastTable,
    "versions": VersionTable,
    "archive": ArchiveTable,
    "criteria": CriteriaTable,
    "engine": EngineTable,
}
