"""Where the places of the settings lie: factors found for one must not be applied to another."""

from __future__ import annotations

from typing import NamedTuple

import numpy as np

from ensemble_horizon.night.variables import Places
from ensemble_horizon.runs import Catalogue
from ensemble_horizon.settings import Settings
from ensemble_horizon.spread.places import grid_points
from ensemble_horizon.vocabulary import LATITUDE, LONGITUDE

_SAME_DEGREES = 1e-3
# A region lies elsewhere if its points do, by this share of their distance from one another.
_SAME_SHARE = 0.25


class Geometry(NamedTuple):
    """Where K places lie; NaN where the runs have no latitude and longitude.

    Parameters
    ----------
    box : (K, 4) south, north, west and east in degrees; a site is a box without width
    mean : (K, 3) mean of the places of its grid points on the unit sphere, by weight: a box may
        be as wide as the Earth and the grid be that of a bay
    """

    box: np.ndarray
    mean: np.ndarray

    def differs(self, other: Geometry) -> np.ndarray:
        """Which places (K,) lie elsewhere in the other.

        Examples
        --------
        >>> here = Geometry(np.array([[0.0, 90.0, -180.0, 180.0]]), np.zeros((1, 3)))
        >>> same = Geometry(np.array([[0.0, 90.0, 0.0, 360.0]]), np.zeros((1, 3)))
        >>> bool(here.differs(same)[0]), bool(here.differs(same._replace(box=here.box + 1))[0])
        (False, True)
        """
        away = self.box - other.box
        away[:, 2:] = (away[:, 2:] + 180) % 360 - 180
        whole = [item[:, 3] - item[:, 2] >= 360 for item in (self.box, other.box)]
        away[whole[0] & whole[1], 2:] = 0.0  # the same circle, wherever it begins
        edges = (np.abs(away) > _SAME_DEGREES).any(axis=1)
        width = np.sqrt(np.clip(1 - (self.mean**2).sum(axis=1), 0, 1))
        moved = np.linalg.norm(self.mean - other.mean, axis=1) > _SAME_SHARE * width
        site = self.box[:, 0] == self.box[:, 1]
        nowhere = np.isnan(self.box).any(axis=1) != np.isnan(other.box).any(axis=1)
        return edges | (moved & ~site) | nowhere

    def words(self, place: int) -> str:
        """One place in words."""
        south, north, west, east = self.box[place]
        if np.isnan(south):
            return "without latitude and longitude"
        if south == north:
            return f"at {south:g} N, {west:g} E"
        return f"in {south:g} to {north:g} N, {west:g} to {east:g} E"


def geometry_of(settings: Settings, catalogue: Catalogue, places: Places) -> Geometry:
    """The geometry of all places, regions first."""
    number = len(places.names)
    box, mean = np.full((number, 4), np.nan), np.full((number, 3), np.nan)
    if not {LATITUDE, LONGITUDE} <= set(catalogue.grid.coords):
        return Geometry(box, mean)
    regions, sites = settings.places()
    edges = [(item.south, item.north, item.west, item.east) for item in regions]
    edges += [(s.latitude, s.latitude, s.longitude, s.longitude) for s in sites]
    latitude, longitude = (np.radians(item) for item in grid_points(catalogue.grid.coords))
    for place, region in enumerate(places.regions):
        north, east = latitude[region.index], longitude[region.index]
        points = np.cos(north) * np.cos(east), np.cos(north) * np.sin(east), np.sin(north)
        mean[place] = [item @ region.weight for item in points]
    return Geometry(np.array(edges, dtype=float).reshape(number, 4), np.nan_to_num(mean))
