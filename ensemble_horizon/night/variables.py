"""Settings held against the files: what each variable is read from, and where its places lie."""

from __future__ import annotations

import logging
from dataclasses import dataclass

import numpy as np

from ensemble_horizon.errors import ArgumentError, InputError, SettingsError
from ensemble_horizon.horizon.criteria import Chance, Criterion
from ensemble_horizon.night.reading import SourceVariable
from ensemble_horizon.runs import Catalogue
from ensemble_horizon.runs.fields import open_field
from ensemble_horizon.runs.units import converter, difference_scale, same_units
from ensemble_horizon.settings import Settings
from ensemble_horizon.spread.displacements import SPHERE
from ensemble_horizon.spread.places import (
    Region,
    grid_points,
    nearest_point,
    region_weights,
)
from ensemble_horizon.spread.positions import Geometry, geometry_of
from ensemble_horizon.spread.reduction import Reduction, RegionWeights
from ensemble_horizon.spread.sample import SampleLayout, sample_layout
from ensemble_horizon.vocabulary import LATITUDE, LONGITUDE

SERIES = "series"
LATITUDES = (-90.0, 90.0)

log = logging.getLogger(__name__)


@dataclass(frozen=True)
class Places:
    """Regions and sites on the grid of the runs.

    Parameters
    ----------
    regions : tuple of RegionWeights
    sites : tuple of str, names
    site_index : (S,) int into the flattened grid
    """

    regions: tuple[RegionWeights, ...]
    sites: tuple[str, ...]
    site_index: np.ndarray

    @property
    def names(self) -> list[tuple[str, str]]:
        """Name and kind of every place, regions first."""
        return [(item.name, "region") for item in self.regions] + [
            (name, "site") for name in self.sites
        ]


@dataclass(frozen=True)
class Variable:
    """One variable of the settings, resolved.

    Parameters
    ----------
    name, long_name, units : str
        ``units`` are those of the results.
    parts : tuple of str
        Source names.
    factor, offset : float
        Turn a value in the units of the files into one in ``units``; a difference by the factor.
        Of positions on the sphere, the displacements in metres.
    plausible : (lowest, highest) in the units of the files, or None
    criteria : dict of label to Criterion, in ``units``
    climatology : (P,) climatological standard deviation in ``units``, or None
    """

    name: str
    long_name: str
    units: str
    parts: tuple[str, ...]
    factor: float
    plausible: tuple[float, float] | None
    hold: float
    criteria: dict[str, Criterion]
    climatology: np.ndarray | None
    offset: float = 0.0
    geometry: str | None = None

    def in_results(self, value: float) -> float:
        """A value in the units of the files, such as a plausible one, in `value_units`."""
        return value if self.geometry is not None else value * self.factor + self.offset

    @property
    def value_units(self) -> str:
        """Units in which values are spoken of: of positions, those of the latitude."""
        return "degrees_north" if self.geometry == SPHERE else self.units

    @property
    def distances(self) -> tuple[float, ...]:
        """Distances of the chance criteria, in the units of the results, each once."""
        found = [item.beyond for item in self.criteria.values() if isinstance(item, Chance)]
        return tuple(dict.fromkeys(found))

    def source(
        self, places: Places, sample: SampleLayout, size: int, fields: bool
    ) -> SourceVariable:
        """What the reading needs to know of this variable."""
        beyond = tuple(distance / self.factor for distance in self.distances)
        reduction = Reduction(
            size, places.regions, places.site_index, sample.index, beyond, fields, self.geometry
        )
        return SourceVariable(self.name, self.parts, reduction)


def source_names(settings: Settings) -> list[str]:
    """Source names that the settings ask for, each once."""
    names: list[str] = []
    for name, table in settings.variables.items():
        names += table.sources(name)
    return list(dict.fromkeys(names))


def levels_of(settings: Settings) -> dict[str, float]:
    """Vertical level by source name, where the settings choose one."""
    found: dict[str, float] = {}
    for name, table in settings.variables.items():
        if table.level is not None:
            for part in table.sources(name):
                if found.setdefault(part, table.level) != table.level:
                    raise SettingsError(
                        f"variables.{name}.level",
                        expected=f"one level for {part!r} in one settings file",
                        found=f"{found[part]:g} and {table.level:g}",
                        remedy="use a settings file for each level",
                    )
    return found


def resolve_variable(
    settings: Settings, catalogue: Catalogue, name: str, *, climatology: bool = False
) -> Variable:
    """Hold one ``[variables.NAME]`` against the files.

    The climatology is read where a criterion needs it, or where it is asked for.

    Raises
    ------
    SettingsError, InputError
        if units do not convert, or the climatology is not on the grid.
    """
    table = settings.variables[name]
    parts = table.sources(name)
    geometry = position_geometry(settings, catalogue, name)
    file_units, factor, offset = _file_units(settings, catalogue, name), 1.0, 0.0
    units = table.units or file_units or "1"
    plausible = None
    if geometry is not None:
        units = table.units or "m"
        factor = geometry.metres * difference_scale("m", units, f"variables.{name}.units")
        plausible = LATITUDES if geometry.kind == SPHERE else None
    elif table.units is not None:
        factor, offset = converter(file_units, units, f"variables.{name}.units")
    if table.plausible is not None:
        low, high = ((value - offset) / factor for value in table.plausible)
        plausible = (min(low, high), max(low, high))
    _warn_of_hold(name, table.hold, catalogue)
    own = catalogue.variables[parts[0]].attrs.get("long_name")
    default = str(own or name.replace("_", " "))
    return Variable(
        name=name,
        long_name=table.label or (name.replace("_", " ") if len(parts) == 2 else default),
        units=units,
        parts=parts,
        factor=abs(factor),
        plausible=plausible,
        hold=table.hold,
        criteria=settings.criteria(name, units),
        climatology=_climatology(settings, catalogue, name, units, climatology),
        offset=offset,
        geometry=None if geometry is None else geometry.kind,
    )


def position_geometry(settings: Settings, catalogue: Catalogue, name: str) -> Geometry | None:
    """The geometry of a position by the units of its coordinates; None for other variables.

    Raises
    ------
    SettingsError, InputError
        if the units are those of no position, or are missing in the files.
    """
    pair = settings.variables[name].position
    if pair is None:
        return None
    units = [catalogue.variables[part].units or "" for part in pair]
    try:
        return geometry_of(units[0], units[1], f"variables.{name}.position")
    except ArgumentError as error:
        kind = SettingsError if all(units) else InputError
        found = ", ".join(
            f"{part!r} in {unit!r}" if unit else f"{part!r} without units"
            for part, unit in zip(pair, units, strict=True)
        )
        raise kind(
            error.culprit, expected=error.expected, found=found, remedy=error.remedy
        ) from error


def _file_units(settings: Settings, catalogue: Catalogue, name: str) -> str:
    """Units of a scalar in the files, the same for both components of a vector."""
    pair = settings.variables[name].speed
    units = [
        catalogue.variables[part].units or "" for part in settings.variables[name].sources(name)
    ]
    if pair is not None and not same_units(units[0], units[1]):
        raise SettingsError(
            f"variables.{name}.speed",
            expected="two components in the same units",
            found=f"{units[0]!r} and {units[1]!r}",
            remedy="name the two components of one vector",
        )
    return units[0]


def _warn_of_hold(name: str, hold: float, catalogue: Catalogue) -> None:
    run = float(catalogue.leads[-1] - catalogue.leads[0])
    if hold > run:
        log.warning(
            "variables.%s.hold: %g %s cannot pass within a run of %g %s, so no limit is reached",
            name, hold, catalogue.lead_units, run, catalogue.lead_units,
        )  # fmt: skip


def _climatology(
    settings: Settings, catalogue: Catalogue, name: str, units: str, wanted: bool
) -> np.ndarray | None:
    table = settings.climatology
    wanted |= any(item.climatology_fraction for item in settings.variables[name].criteria)
    if table is None or not wanted:
        return None
    source = table.names.get(name, settings.variables[name].source or name)
    try:
        field = open_field(settings.path(table.file), source, catalogue.grid)
    except InputError as error:
        if not error.expected.startswith("the variable "):
            raise
        raise InputError(
            error.culprit,
            expected=f"the climatology of {name}, {error.expected}",
            found=error.found,
            remedy=f"give climatology.names.{name} the name that the variable has in that file",
        ) from error
    what = f"climatology {source!r} in {table.file}"
    own = str(field.attrs.get("units", units))
    try:
        scale = abs(difference_scale(own, units, what))
    except SettingsError as error:
        raise InputError(
            what,
            expected=f"a standard deviation in units that convert to {units!r}",
            found=f"{own!r} in the file",
            remedy="correct the units attribute of the file, or name another variable of it "
            f"under climatology.names.{name}",
        ) from error
    if (field.values < 0).any():
        raise InputError(
            what,
            expected="a standard deviation, which is never below zero",
            found=f"{float(np.nanmin(field.values)):g}",
            remedy="put the climatological standard deviation there, not an anomaly or a mean",
        )
    size = int(np.prod(catalogue.grid.shape, dtype=int))
    return np.broadcast_to(field.values.ravel() * scale, (size,)).astype(float)


def resolve_places(settings: Settings, catalogue: Catalogue) -> Places:
    """Hold regions and sites against the grid.

    Raises
    ------
    SettingsError
        if a region holds no grid point, a site lies off the grid, or the runs have no space.
    """
    regions, sites = settings.places()
    if not catalogue.grid.shape:
        if settings.regions or settings.sites:
            raise SettingsError(
                "regions and sites",
                expected="none, because the runs are series without space",
                found=", ".join([*settings.regions, *settings.sites]),
                remedy="take [regions] and [sites] out of the settings",
            )
        return Places((), (SERIES,), np.zeros(1, dtype=int))
    if not {LATITUDE, LONGITUDE} <= set(catalogue.grid.coords):
        return _everywhere(settings, catalogue)
    latitude, longitude = grid_points(catalogue.grid.coords)
    try:
        weights = tuple(_region(region, latitude, longitude) for region in regions)
        nearest = [nearest_point(site, latitude, longitude) for site in sites]
    except ArgumentError as error:
        raise SettingsError(
            error.culprit, expected=error.expected, found=error.found, remedy=error.remedy
        ) from error
    for site, (_, distance) in zip(sites, nearest, strict=True):
        log.info("site %s: the nearest grid point lies %.0f km away", site.name, distance)
    return Places(
        weights,
        tuple(site.name for site in sites),
        np.array([index for index, _ in nearest], dtype=int),
    )


def _everywhere(settings: Settings, catalogue: Catalogue) -> Places:
    """The whole domain of a grid without latitude and longitude: all points count alike."""
    if settings.regions or settings.sites:
        raise SettingsError(
            "regions and sites",
            expected="none, because the grid of the runs has no latitude and longitude",
            found=", ".join([*settings.regions, *settings.sites]),
            remedy="take them out of the settings, or add latitude and longitude to the files",
        )
    size = int(np.prod(catalogue.grid.shape, dtype=int))
    whole = RegionWeights("domain", np.arange(size), np.full(size, 1 / size))
    return Places((whole,), (), np.empty(0, dtype=int))


def layout_of(catalogue: Catalogue) -> SampleLayout:
    """The sample of the grid of a catalogue."""
    return sample_layout(catalogue.grid.shape, len(catalogue.members), catalogue.leads.size)


def _region(region: Region, latitude: np.ndarray, longitude: np.ndarray) -> RegionWeights:
    weights = region_weights(region, latitude, longitude)
    index = np.flatnonzero(weights)
    return RegionWeights(region.name, index, weights[index])
