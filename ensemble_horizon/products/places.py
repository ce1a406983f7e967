"""What a map stands on: outlines of regions, marks of sites, and whether there is a coast."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass

import numpy as np


@dataclass(frozen=True)
class PlaceMark:
    """A named place: one point is a site, several are the outline of a region.

    Attributes
    ----------
    name : str
        What stands beside it on the map.
    longitudes, latitudes : tuple of float
        Degrees; an outline is drawn as given, so repeat its first point at the end.

    Examples
    --------
    >>> PlaceMark.box("bank", 170.0, -170.0, -20.0, -10.0).longitudes
    (170.0, 190.0, 190.0, 170.0, 170.0)
    """

    name: str
    longitudes: tuple[float, ...]
    latitudes: tuple[float, ...]

    @classmethod
    def box(cls, name: str, west: float, east: float, south: float, north: float) -> PlaceMark:
        """Return the outline of a box; ``east < west`` crosses the date line."""
        far = east if east > west else east + 360.0
        return cls(name, (west, far, far, west, west), (south, south, north, north, south))

    @classmethod
    def site(cls, name: str, longitude: float, latitude: float) -> PlaceMark:
        """Return the mark of a site."""
        return cls(name, (longitude,), (latitude,))

    def shifted(self, west: float, east: float) -> Iterator[tuple[np.ndarray, np.ndarray]]:
        """Yield the outline by whole turns of the globe wherever it touches the window."""
        x, y = np.array(self.longitudes), np.array(self.latitudes)
        first = int(np.ceil((west - x.max()) / 360.0))
        last = int(np.floor((east - x.min()) / 360.0))
        for turn in range(first, last + 1):
            yield x + 360.0 * turn, y


@dataclass(frozen=True)
class Ground:
    """What a map stands on.

    Attributes
    ----------
    marks : tuple of PlaceMark
        Regions and sites to show.
    coastline : bool
        Whether the coasts of the Earth are drawn; not under a place that is invented.
    """

    marks: tuple[PlaceMark, ...] = ()
    coastline: bool = True


BARE = Ground()
