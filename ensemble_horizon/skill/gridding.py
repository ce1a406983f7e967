"""Factors of coarse cells brought to the points of a finer grid."""

from __future__ import annotations

import numpy as np
import xarray as xr
from scipy.spatial import cKDTree

from ensemble_horizon.checks import require_dimension
from ensemble_horizon.spread.curves import spatial_dimensions
from ensemble_horizon.spread.places import EARTH_RADIUS_KM, grid_points
from ensemble_horizon.vocabulary import LATITUDE, LEAD, LONGITUDE

_NEIGHBOURS = 4
_LOGARITHMIC = ("factor", "low", "high")


def calibration_on_grid(calibration: xr.Dataset, like: xr.DataArray) -> xr.Dataset:
    """A calibration of coarse cells at every point of a finer grid.

    Parameters
    ----------
    calibration : Dataset (lead, *cells)
        From `calibration_factor`, with ``latitude`` and ``longitude`` of the cells.
    like : DataArray with the ``latitude`` and ``longitude`` of the finer grid

    Returns
    -------
    Dataset (lead, *space) with ``factor``, ``low``, ``high`` and ``log_variance``, and with
    ``noise_correlation`` as it was; for `apply_calibration`. NaN at points with no calibrated cell
    within two cell spacings.

    Raises
    ------
    ArgumentError
        if one of the two has no latitude and longitude, or the calibration no lead.

    Notes
    -----
    Logarithms of the factors, and their variances, of the four nearest cells are averaged with
    weights of one over the distance (Shepard 1968). Averaging the variances takes the noise of
    neighbouring cells as shared, the largest that it can be.

    Examples
    --------
    >>> cells = {"latitude": ("cell", [0.0, 0.0]), "longitude": ("cell", [0.0, 10.0])}
    >>> held = xr.Dataset({"factor": (("lead", "cell"), [[1.0, 4.0]])}, {"lead": [6.0], **cells})
    >>> like = xr.DataArray([0.0, 0.0], dims="point",
    ...     coords={"latitude": ("point", [0.0, 0.0]), "longitude": ("point", [5.0, 10.0])})
    >>> calibration_on_grid(held, like).factor.values.round(3).tolist()
    [[2.0, 4.0]]
    """
    require_dimension(calibration, LEAD, "calibration")
    cells, space = spatial_dimensions(calibration["factor"]), spatial_dimensions(like)
    here, there = (
        _unit_vectors(*grid_points({name: item[name] for name in (LATITUDE, LONGITUDE)}))
        for item in (calibration, like)
    )
    index, weight = _nearest(here, there)
    shape = tuple(like.sizes[name] for name in space)
    coords = {name: like[name] for name in (LATITUDE, LONGITUDE)}
    found = xr.Dataset(coords={LEAD: calibration[LEAD], **coords})
    for name in (*_LOGARITHMIC, "log_variance"):
        if name not in calibration:
            continue
        values = calibration[name].transpose(LEAD, *cells).values
        values = values.reshape(values.shape[0], -1)
        values = np.log(values) if name in _LOGARITHMIC else values
        mean = _weighted(values[:, index], weight)
        mean = np.exp(mean) if name in _LOGARITHMIC else mean
        attributes = calibration[name].attrs
        found[name] = ((LEAD, *space), mean.reshape(-1, *shape), attributes)
    if "noise_correlation" in calibration:
        found["noise_correlation"] = calibration["noise_correlation"]
    return found


def _unit_vectors(latitude: np.ndarray, longitude: np.ndarray) -> np.ndarray:
    north, east = np.radians(latitude), np.radians(longitude)
    return np.stack(
        [np.cos(north) * np.cos(east), np.cos(north) * np.sin(east), np.sin(north)], axis=-1
    )


def _nearest(cells: np.ndarray, points: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """The nearest cells (P, N) of each point and their weights, zero beyond two spacings."""
    tree = cKDTree(cells)
    number = min(_NEIGHBOURS, cells.shape[0])
    chord, index = tree.query(points, k=np.arange(1, number + 1))
    spacing = np.inf
    if cells.shape[0] > 1:
        spacing = float(np.max(tree.query(cells, k=[2])[0]))
    # A metre: at the very place of a cell that cell alone counts.
    weight = 1 / np.maximum(chord, 1e-3 / EARTH_RADIUS_KM)
    return index, np.where(chord <= 2 * spacing, weight, 0.0)


def _weighted(values: np.ndarray, weight: np.ndarray) -> np.ndarray:
    """Mean (L, P) of values (L, P, N) over those that are there."""
    known = np.isfinite(values)
    with np.errstate(invalid="ignore", divide="ignore"):
        total = (np.where(known, values, 0.0) * weight).sum(axis=-1)
        return np.asarray(total / (known * weight).sum(axis=-1))
