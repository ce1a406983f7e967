"""Regions and sites, and the weights by which a field is averaged over them."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np
import xarray as xr

from ensemble_horizon.checks import require_positive
from ensemble_horizon.errors import ArgumentError
from ensemble_horizon.vocabulary import LATITUDE, LONGITUDE

# Degrees: coordinates in single precision miss the edge of a region by up to this much.
_EDGE = 1e-4
EARTH_RADIUS_KM = 6371.0  # mean radius, rounded (common practice)


@dataclass(frozen=True)
class Region:
    """A box between two parallels and two meridians; it may cross the date line.

    Parameters
    ----------
    name : str
    south, north : float, degrees north
    west, east : float, degrees east, in any convention; ``west == east`` is refused

    Examples
    --------
    >>> bool(Region("strait", south=-10, north=10, west=170, east=-170).contains(0.0, 185.0))
    True
    """

    name: str
    south: float = -90.0
    north: float = 90.0
    west: float = -180.0
    east: float = 180.0

    def __post_init__(self) -> None:
        if not -90 <= self.south < self.north <= 90:
            raise ArgumentError(
                f"region {self.name!r}",
                expected="-90 <= south < north <= 90",
                found=f"south = {self.south}, north = {self.north}",
                remedy="correct the two latitudes",
            )
        if abs(self.east - self.west) % 360 == 0 and self.east - self.west < 360:
            raise ArgumentError(
                f"region {self.name!r}",
                expected="west and east to differ (use -180 and 180 for the whole circle)",
                found=f"west = {self.west}, east = {self.east}, one and the same meridian",
                remedy="correct the two longitudes",
            )

    def contains(self, latitude: np.ndarray | float, longitude: np.ndarray | float) -> np.ndarray:
        """Whether points lie in the box, edges included."""
        latitude, longitude = np.asarray(latitude), np.asarray(longitude)
        inside = (latitude >= self.south - _EDGE) & (latitude <= self.north + _EDGE)
        if self.east - self.west >= 360:
            return np.asarray(inside)
        width = (self.east - self.west) % 360
        return np.asarray(inside & ((longitude - self.west + _EDGE) % 360 <= width + 2 * _EDGE))


@dataclass(frozen=True)
class Site:
    """A point for which the nearest grid point or cell stands.

    Parameters
    ----------
    name : str
    latitude, longitude : float, degrees
    reach_km : float
        How far the nearest grid point may lie away; further off is refused. ``None`` means one
        and a half grid spacings as judged from the nearest points.
    """

    name: str
    latitude: float
    longitude: float
    reach_km: float | None = None

    def __post_init__(self) -> None:
        if not -90 <= self.latitude <= 90 or not -360 <= self.longitude <= 360:
            raise ArgumentError(
                f"site {self.name!r}",
                expected="latitude within -90..90 and longitude within -360..360",
                found=f"{self.latitude}, {self.longitude}",
                remedy="correct the position",
            )
        if self.reach_km is not None:
            require_positive(self.reach_km, f"site {self.name!r}: reach_km")


def great_circle_km(
    latitude: np.ndarray | float,
    longitude: np.ndarray | float,
    other_latitude: np.ndarray | float,
    other_longitude: np.ndarray | float,
) -> np.ndarray:
    """Great-circle distance in kilometres by the haversine formula.

    Examples
    --------
    >>> round(float(great_circle_km(0.0, 0.0, 0.0, 90.0)))  # a quarter of the equator
    10008
    """
    first, second = np.radians(latitude), np.radians(other_latitude)
    across = np.radians(np.asarray(other_longitude) - np.asarray(longitude))
    half = np.sin((second - first) / 2) ** 2
    half = half + np.cos(first) * np.cos(second) * np.sin(across / 2) ** 2
    return np.asarray(2 * EARTH_RADIUS_KM * np.arcsin(np.sqrt(np.clip(half, 0, 1))))


def grid_points(coords: Mapping[str, xr.DataArray]) -> tuple[np.ndarray, np.ndarray]:
    """Latitude and longitude of every point in the order of the flattened field, degrees.

    Accepts 1-D latitude and longitude on dimensions of their own (in the order latitude,
    longitude), 2-D fields of both, or both on one cell dimension.
    """
    latitude, longitude = coords[LATITUDE], coords[LONGITUDE]
    if latitude.dims == longitude.dims:
        return latitude.values.ravel().astype(float), longitude.values.ravel().astype(float)
    grid = np.meshgrid(latitude.values, longitude.values, indexing="ij")
    return grid[0].ravel().astype(float), grid[1].ravel().astype(float)


def area_weights(latitude: np.ndarray, area: np.ndarray | None = None) -> np.ndarray:
    """Weight of each point: the given cell area, or cos(latitude) where none is given.

    Cos-latitude weights are those of the standard verification of the WMO Manual on the Global
    Data-processing and Forecasting System, WMO-No. 485 (from memory); exact only for grids that
    are regular in latitude and longitude.
    """
    if area is not None:
        weights = np.asarray(area, dtype=float).ravel()
        if weights.shape != latitude.shape or np.any(weights < 0):
            raise ArgumentError(
                "area",
                expected=f"{latitude.size} cell areas of at least zero",
                found=f"{weights.size} values, smallest {weights.min():.3g}",
                remedy="give the cell areas of this very grid",
            )
        return weights
    return np.maximum(np.cos(np.radians(latitude)), 0.0)


def region_weights(
    region: Region, latitude: np.ndarray, longitude: np.ndarray, area: np.ndarray | None = None
) -> np.ndarray:
    """Weights of a region over the flattened grid, summing to one; zero outside.

    Raises
    ------
    ArgumentError
        if no grid point lies in the region.
    """
    weights = np.where(region.contains(latitude, longitude), area_weights(latitude, area), 0.0)
    total = weights.sum()
    if total <= 0:
        raise ArgumentError(
            f"region {region.name!r}",
            expected="at least one grid point inside",
            found=f"a grid from {latitude.min():.4g} to {latitude.max():.4g} degrees north and "
            f"{longitude.min():.4g} to {longitude.max():.4g} degrees east",
            remedy="move or widen the region",
        )
    return np.asarray(weights / total)


def nearest_point(site: Site, latitude: np.ndarray, longitude: np.ndarray) -> tuple[int, float]:
    """Index of the grid point nearest to a site, and its distance in kilometres.

    Raises
    ------
    ArgumentError
        if the nearest point is further away than the site's reach.
    """
    distance = great_circle_km(site.latitude, site.longitude, latitude, longitude)
    distance = np.where(np.isfinite(distance), distance, np.inf)  # grids with holes
    index = int(np.argmin(distance))
    reach = site.reach_km
    if reach is None:
        spacing = great_circle_km(latitude[index], longitude[index], latitude, longitude)
        others = spacing[spacing > 1e-6]
        reach = 1.5 * float(others.min()) if others.size else np.inf
        reach = max(reach, 1.5 * _spacing_across(latitude, longitude, index))
    if distance[index] > reach:
        raise ArgumentError(
            f"site {site.name!r}",
            expected=f"a grid point within {reach:.0f} km",
            found=f"the nearest one, {latitude[index]:.3f} N {longitude[index]:.3f} E, "
            f"{distance[index]:.0f} km away",
            remedy="correct the position, or give the site a larger reach_km",
        )
    return index, float(distance[index])


def _spacing_across(latitude: np.ndarray, longitude: np.ndarray, index: int) -> float:
    # On grids with unequal spacing in the two directions the nearest neighbour alone is too strict.
    same_row = np.abs(latitude - latitude[index]) < 1e-6
    same_column = np.abs((longitude - longitude[index] + 180) % 360 - 180) < 1e-6
    widest = 0.0
    for line in (same_row, same_column):
        gap = great_circle_km(latitude[index], longitude[index], latitude[line], longitude[line])
        gap = gap[gap > 1e-6]
        if gap.size:
            widest = max(widest, float(gap.min()))
    return widest
