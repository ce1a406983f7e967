"""Coastlines for the maps, from the public-domain data beside this module."""

from __future__ import annotations

from functools import lru_cache
from importlib import resources

import numpy as np

from ensemble_horizon.errors import ArgumentError

_FOLDER = "data"
_FILE = "coastline.npz"


def coastlines(
    west: float, east: float, south: float, north: float, *, smallest: float = 0.0
) -> list[np.ndarray]:
    """Return the coastlines that touch a window.

    Parameters
    ----------
    west, east : float
        Edges of the window in degrees east, ``west < east``; any turn of the globe is welcome, so
        ``(170, 200)`` is a window across the date line.
    south, north : float
        Edges in degrees north.
    smallest : float
        Closed lines (islands) smaller than this many degrees in both directions are left out.

    Returns
    -------
    list of numpy.ndarray
        Lines of shape (points, 2): longitude, shifted by whole turns into the window, and latitude.
        A line is returned whole as soon as its bounding box touches the window.

    Raises
    ------
    ArgumentError
        If the window is empty.

    Notes
    -----
    The data are Natural Earth land at 1:50 million; ``data/PROVENANCE.txt`` has the particulars.

    Examples
    --------
    >>> lines = coastlines(-25.0, -13.0, 63.0, 67.0)
    >>> all(line.shape[1] == 2 for line in lines) and len(lines) > 0
    True
    """
    if not (west < east and south < north):
        raise ArgumentError(
            "coastlines window",
            expected="west < east and south < north",
            found=f"west {west}, east {east}, south {south}, north {north}",
            remedy="add 360 to an eastern edge that lies beyond the date line",
        )
    lines, boxes = _world()
    found: list[np.ndarray] = []
    size = np.maximum(boxes[:, 1] - boxes[:, 0], boxes[:, 3] - boxes[:, 2])
    kept = (size >= smallest) & (boxes[:, 3] >= south) & (boxes[:, 2] <= north)
    first_turn = int(np.floor((west + 180.0) / 360.0))
    last_turn = int(np.floor((east + 180.0) / 360.0))
    for turn in range(first_turn, last_turn + 1):
        shift = 360.0 * turn
        touching = kept & (boxes[:, 1] + shift >= west) & (boxes[:, 0] + shift <= east)
        found += [lines[index] + [shift, 0.0] for index in np.flatnonzero(touching)]
    return found


@lru_cache(maxsize=1)
def _world() -> tuple[list[np.ndarray], np.ndarray]:
    """Unpack the data file: lines, and their boxes (lines, 4) west, east, south, north."""
    packed = resources.files("ensemble_horizon.products") / _FOLDER / _FILE
    with packed.open("rb") as stream, np.load(stream) as content:
        counts = content["counts"]
        steps = content["differences"].astype(np.int64)
        per_degree = float(content["steps_per_degree"])
    lines = [
        np.cumsum(part, axis=0) / per_degree for part in np.split(steps, np.cumsum(counts)[:-1])
    ]
    boxes = np.array(
        [[*np.array([line.min(axis=0), line.max(axis=0)]).T.ravel()] for line in lines]
    )
    return lines, boxes
