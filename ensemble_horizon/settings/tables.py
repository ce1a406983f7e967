"""The tables of a settings file as frozen records."""

from __future__ import annotations

import difflib
import os
import re
from pathlib import Path
from typing import Annotated, Literal

from pydantic import Field, field_validator, model_validator

from ensemble_horizon.errors import SettingsError
from ensemble_horizon.growth.laws import LAWS
from ensemble_horizon.horizon.criteria import Criterion
from ensemble_horizon.settings.criteria import (
    CriterionTable,
    Fraction,
    Positive,
    Table,
    criterion_of,
)
from ensemble_horizon.spread import Region, Site


class RunsTable(Table):
    """``[runs]``: which files, which members, and what to do with a faulty member."""

    files: str | tuple[str, ...]
    members: int | tuple[int | str, ...] | None = None
    control: int | str | None = None
    minimum_members: Annotated[int, Field(ge=2)] = 5
    incomplete: Literal["drop", "use", "stop"] = "drop"
    lagged: bool = False
    starts: Literal["all", "latest"] | tuple[str, ...] = "all"


class VariableTable(Table):
    """``[variables.NAME]``: where the variable comes from and what it must meet."""

    source: str | None = None
    speed: tuple[str, str] | None = None
    position: tuple[str, str] | None = None
    label: str | None = None
    units: str | None = None
    plausible: tuple[float, float] | None = None
    level: float | None = None
    hold: Annotated[float, Field(ge=0, allow_inf_nan=False)] = 0.0
    criteria: Annotated[tuple[CriterionTable, ...], Field(min_length=1)]

    @model_validator(mode="after")
    def _one_source(self) -> VariableTable:
        keys = ("source", "speed", "position")
        given = [key for key in keys if getattr(self, key) is not None]
        if len(given) > 1:
            raise ValueError(
                f"either source or speed or position, not {' and '.join(given)} together"
            )
        if self.position is not None and self.plausible is not None:
            raise ValueError(
                "a position has no plausible range of its own; latitudes are held to -90 to 90"
            )
        return self

    @field_validator("position")
    @classmethod
    def _two_coordinates(cls, value: tuple[str, str] | None) -> tuple[str, str] | None:
        if value is not None and value[0] == value[1]:
            raise ValueError("two different variables, latitude and longitude or x and y")
        return value

    @field_validator("plausible")
    @classmethod
    def _ascending(cls, value: tuple[float, float] | None) -> tuple[float, float] | None:
        if value is not None and not value[0] < value[1]:
            raise ValueError("[lowest, highest] with lowest below highest")
        return value

    def sources(self, name: str) -> tuple[str, ...]:
        """Names in the files of what the variable ``name`` is made from."""
        return self.speed or self.position or (self.source or name,)

    @property
    def source_key(self) -> str:
        """The key under which `sources` are named."""
        return "speed" if self.speed else "position" if self.position else "source"


class RegionTable(Table):
    """``[regions.NAME]``: a box; west may lie east of east, across the date line."""

    south: float = -90.0
    north: float = 90.0
    west: float = -180.0
    east: float = 180.0


class SiteTable(Table):
    """``[sites.NAME]``: a point, and how far its grid point may lie away."""

    latitude: float
    longitude: float
    reach_km: Positive | None = None


class GrowthTable(Table):
    """``[growth]``: the law, the scale of the fit, and the confidence of all intervals."""

    law: str = "auto"
    scale: Literal["log", "linear"] = "log"
    confidence: Fraction = 0.9

    @field_validator("law")
    @classmethod
    def _known(cls, value: str) -> str:
        known = ["auto", *LAWS]
        if value not in known:
            near = difflib.get_close_matches(value, known, n=1)
            hint = f"; did you mean {near[0]!r}?" if near else ""
            raise ValueError(f"one of {', '.join(known)}{hint}")
        return value


class ClimatologyTable(Table):
    """``[climatology]``: standard deviations and means, the files and the names in them."""

    file: str
    names: dict[str, str] = Field(default_factory=dict)
    mean_file: str | None = None
    mean_names: dict[str, str] = Field(default_factory=dict)


class AnalysesTable(Table):
    """``[analyses]``: verifying analyses, found by valid time, and names in their files."""

    files: str | tuple[str, ...]
    names: dict[str, str | tuple[str, str]] = Field(default_factory=dict)


class ObservationsTable(Table):
    """``[observations.NAME]``: a CSV file of observations of one variable at the sites."""

    file: str
    units: str | None = None
    time: str = "time"
    site: str = "site"
    value: str = "value"


class VerificationTable(Table):
    """``[verification]``: what skill must stay above, and how certain a calibration must be.

    ``resamples``: how often starts are drawn anew for a second opinion on intervals; 0 for none.
    """

    skill: Annotated[float, Field(lt=1, allow_inf_nan=False)] = 0.0
    correlation: Annotated[float, Field(gt=-1, lt=1)] = 0.6
    factor_uncertainty: Fraction = 0.15
    resamples: Annotated[int, Field(ge=0, le=100_000)] = 0


class CalibrationTable(Table):
    """``[calibration]``: a file that ``verify --calibration`` wrote, for ``estimate`` to apply."""

    file: str


class EngineTable(Table):
    """``[engine]``: where the work is done, on this machine or on a cluster.

    ``scheduler``: the address of a dask scheduler, the path of a scheduler file, or "configured"
    for what dask's own configuration names.
    """

    workers: Annotated[int, Field(ge=1, le=1024)] | None = None
    block_memory_mib: Annotated[int, Field(ge=8)] = 192
    scheduler: Annotated[str, Field(min_length=1)] | None = None

    @field_validator("scheduler")
    @classmethod
    def _reachable(cls, value: str | None) -> str | None:
        if value is None or re.fullmatch(r"(tcp|tls)://[^/\s]+:\d+", value):
            return value
        if "://" in value or re.fullmatch(r"[^/\\]+:\d+", value):
            host = value.rpartition("://")[2]
            known = re.fullmatch(r"[^/\s]+:\d+", host) is not None
            example = f"tcp://{host}" if known else "tcp://host:8786"
            raise ValueError(
                f"an address such as {example} or {example.replace('tcp', 'tls', 1)}, "
                'the path of a scheduler file, or "configured"'
            )
        return value

    @model_validator(mode="after")
    def _one_place(self) -> EngineTable:
        if self.workers is not None and self.scheduler is not None:
            raise ValueError(
                "either engine.workers or engine.scheduler, not both: a cluster has its own workers"
            )
        return self


class ProductsTable(Table):
    """``[products]``: what is written, and where."""

    folder: str
    maps: Literal["each", "pooled", "none"] | None = None
    map_intervals: bool = True
    coastline: bool = True
    figures: bool = True


class NightTable(Table):
    """``[night]``: the nightly chain, its archive, and what "usual" is measured by."""

    archive: str
    usual_nights: Annotated[int, Field(ge=10)] = 30
    season_days: Annotated[int, Field(ge=1, le=182)] = 45
    verify_starts: Annotated[int, Field(ge=1)] = 30
    wait_minutes: Annotated[float, Field(ge=0, allow_inf_nan=False)] = 0.0
    versions: str | None = None


class Settings(Table):
    """A whole settings file. Relative paths count from the folder of the file."""

    title: str = "Ensemble horizons"
    runs: RunsTable
    variables: Annotated[dict[str, VariableTable], Field(min_length=1)]
    regions: dict[str, RegionTable] = Field(default_factory=dict)
    sites: dict[str, SiteTable] = Field(default_factory=dict)
    growth: GrowthTable = Field(default_factory=GrowthTable)
    climatology: ClimatologyTable | None = None
    analyses: AnalysesTable | None = None
    observations: dict[str, ObservationsTable] = Field(default_factory=dict)
    verification: VerificationTable = Field(default_factory=VerificationTable)
    calibration: CalibrationTable | None = None
    night: NightTable | None = None
    engine: EngineTable = Field(default_factory=EngineTable)
    products: ProductsTable

    base: Path = Field(default=Path(), exclude=True)
    text: str = Field(default="", exclude=True)

    def path(self, name: str) -> Path:
        """A path of the settings, counted from the folder of the settings file."""
        return Path(os.path.normpath(self.base / name))

    def run_files(self) -> str | list[str]:
        """The ``files`` of ``[runs]``, counted from the folder of the settings file."""
        return self.files(self.runs.files)

    def files(self, names: str | tuple[str, ...]) -> str | list[str]:
        """A template, or paths, counted from the folder of the settings file."""
        if isinstance(names, str):
            return str(self.path(names))
        return [str(self.path(name)) for name in names]

    def places(self) -> tuple[tuple[Region, ...], tuple[Site, ...]]:
        """Regions and sites; the whole domain where neither is named."""
        regions = tuple(Region(name, **table.model_dump()) for name, table in self.regions.items())
        sites = tuple(Site(name, **table.model_dump()) for name, table in self.sites.items())
        return (regions or (Region("domain"),) if not sites else regions), sites

    def criteria(self, variable: str, units: str) -> dict[str, Criterion]:
        """Criteria of a variable by label, in its units.

        Raises
        ------
        SettingsError
            if a tolerance has a unit that is no difference of the variable, or two criteria
            share a label.
        """
        found: dict[str, Criterion] = {}
        for number, table in enumerate(self.variables[variable].criteria):
            key = f"variables.{variable}.criteria[{number}]"
            criterion = criterion_of(table, units, key)
            label = table.name or criterion.label
            if label in found:
                raise SettingsError(
                    f"{key}.name",
                    expected="a name of its own for every criterion",
                    found=f"a second {label!r}",
                    remedy="rename one of them",
                )
            found[label] = criterion
        return found
