"""How a grid lies on the picture: the window, its aspect, and the grid point under each pixel.

A map is painted pixel by pixel from the grid point beneath, so that plain grids, turned grids and
scattered cells, poles and the date line all go the same way, and no cell is ever torn by a seam.
"""

from __future__ import annotations

from dataclasses import dataclass, field

import numpy as np
import xarray as xr
from scipy.spatial import cKDTree

from ensemble_horizon.errors import ArgumentError
from ensemble_horizon.vocabulary import LATITUDE, LONGITUDE

_STEEPEST_ASPECT = 5.0
_GAP_OF_A_FULL_CIRCLE = 15.0


@dataclass(frozen=True, eq=False)
class MapView:
    """The window of a map and the way from pixels to grid points.

    Attributes
    ----------
    west, east, south, north : float
        Window in degrees (or grid units where ``geographic`` is false); ``west < east``, the
        longitudes unbroken across the date line.
    geographic : bool
        Whether the grid has latitudes and longitudes.
    shape : tuple of int
        Shape of the fields this view takes.
    x, y : numpy.ndarray
        Positions of the grid points in the window, each of ``shape``.
    """

    west: float
    east: float
    south: float
    north: float
    geographic: bool
    shape: tuple[int, ...]
    x: np.ndarray
    y: np.ndarray
    rectilinear: bool
    full_circle: bool
    _cache: dict[tuple[int, int], np.ndarray] = field(default_factory=dict, repr=False)

    @property
    def aspect(self) -> float:
        """Height of one degree of latitude in units of one degree of longitude."""
        if not self.geographic:
            return 1.0
        middle = np.deg2rad((self.south + self.north) / 2)
        return float(min(1 / max(np.cos(middle), 1e-3), _STEEPEST_ASPECT))

    def pixel_size(self, width: int, height: int) -> tuple[int, int]:
        """Return the largest (width, height) in true aspect that fits into the given one."""
        wide = self.east - self.west
        high = (self.north - self.south) * self.aspect
        scale = min(width / wide, height / high)
        # A ribbon of one row still has to be seen.
        return max(round(wide * scale), 40), max(round(high * scale), 40)

    def pixels(self, width: int, height: int) -> tuple[np.ndarray, np.ndarray]:
        """Return the middles of pixel columns (west to east) and rows (north to south)."""
        x = self.west + (np.arange(width) + 0.5) / width * (self.east - self.west)
        y = self.north - (np.arange(height) + 0.5) / height * (self.north - self.south)
        return x, y

    def grid_points(self, width: int, height: int) -> np.ndarray:
        """Return the flat index of the grid point under each pixel, (height, width), -1 outside."""
        key = (width, height)
        if key not in self._cache:
            x, y = self.pixels(width, height)
            if self.rectilinear:
                self._cache[key] = _plain_points(self, x, y)
            else:
                self._cache[key] = _nearest_points(self, x, y)
        return self._cache[key]

    def area_weights(self, width: int, height: int) -> np.ndarray:
        """Return the relative area of the pixels, (height, 1)."""
        _, y = self.pixels(width, height)
        weights = np.cos(np.deg2rad(y)) if self.geographic else np.ones_like(y)
        return np.asarray(np.clip(weights, 0, None)[:, None])


def map_view(field_on_grid: xr.DataArray) -> MapView:
    """Return the view of a field without start, criterion, lead or member dimension.

    Parameters
    ----------
    field_on_grid : xarray.DataArray
        One field, with ``latitude`` and ``longitude`` coordinates (1-D axes, 2-D, or per cell), or
        without them, when its one or two dimensions are the axes.

    Raises
    ------
    ArgumentError
        If the field has no dimension, more than two, or no finite position.

    Examples
    --------
    >>> grid = xr.DataArray(
    ...     np.zeros((2, 3)),
    ...     coords={"latitude": [50.0, 51.0], "longitude": [179.0, -180.0, -179.0]},
    ...     dims=("latitude", "longitude"),
    ... )
    >>> view = map_view(grid)
    >>> view.west, view.east
    (178.5, 181.5)
    """
    dims, shape = field_on_grid.dims, field_on_grid.shape
    if not 1 <= len(dims) <= 2 or 0 in shape:
        raise ArgumentError(
            "map field",
            expected="one or two dimensions in space",
            found=f"dimensions {tuple(map(str, dims))} of sizes {shape}",
            remedy="select one start and one criterion before drawing",
        )
    coords = field_on_grid.coords
    if LATITUDE not in coords or LONGITUDE not in coords:
        return _plane_view(field_on_grid)
    latitude = np.asarray(coords[LATITUDE].values, dtype=float)
    longitude = np.asarray(coords[LONGITUDE].values, dtype=float)
    if dims == (LATITUDE, LONGITUDE):
        return _plain_view(latitude, longitude)
    if latitude.shape != shape or longitude.shape != shape:
        raise ArgumentError(
            "map field",
            expected="dimensions (latitude, longitude), or coordinates on the field's dimensions",
            found=f"dimensions {tuple(map(str, dims))}, latitude of shape {latitude.shape}",
            remedy="transpose the field to the canonical layout",
        )
    return _point_view(latitude, longitude)


def unrolled(longitude: np.ndarray, *, plain: bool = False) -> tuple[np.ndarray, bool]:
    """Return longitudes on one unbroken stretch, and whether they go all round the globe.

    The stretch begins after the widest gap, so a field never breaks where there are data.
    """
    turned = np.mod(longitude, 360.0)
    values = np.unique(np.round(turned[np.isfinite(turned)], 6))
    gaps = np.diff(np.append(values, values[0] + 360.0))
    widest = int(np.argmax(gaps))
    usual = 1.5 * float(np.median(gaps)) if plain else _GAP_OF_A_FULL_CIRCLE
    if values.size > 2 and gaps[widest] <= usual:
        return np.mod(longitude + 180.0, 360.0) - 180.0, True
    west = values[(widest + 1) % values.size]
    width = 360.0 - gaps[widest]
    if west + width / 2 >= 180.0 and west >= 180.0:
        west -= 360.0
    return west + np.mod(turned - west + 1e-6, 360.0) - 1e-6, False


def _edges(middles: np.ndarray, lonely: float) -> np.ndarray:
    """Return cell edges of rising middles; a single middle gets a cell ``lonely`` wide."""
    if middles.size == 1:
        return np.array([middles[0] - lonely / 2, middles[0] + lonely / 2])
    between = (middles[1:] + middles[:-1]) / 2
    first, last = 2 * middles[0] - between[0], 2 * middles[-1] - between[-1]
    return np.concatenate([[first], between, [last]])


def _spacing(values: np.ndarray) -> float:
    return float(np.median(np.abs(np.diff(np.sort(values))))) if values.size > 1 else 1.0


def _plain_view(latitude: np.ndarray, longitude: np.ndarray) -> MapView:
    x, round_the_globe = unrolled(longitude, plain=True)
    rows = _edges(np.sort(latitude), _spacing(x))
    columns = _edges(np.sort(x), _spacing(latitude))
    west, east = (-180.0, 180.0) if round_the_globe else (columns[0], columns[-1])
    X, Y = np.meshgrid(x, latitude)
    south, north = max(float(rows[0]), -90.0), min(float(rows[-1]), 90.0)
    return MapView(
        float(west), float(east), south, north, True, X.shape, X, Y, True, round_the_globe
    )


def _plane_view(plane: xr.DataArray) -> MapView:
    axes = [
        np.asarray(plane[name].values, dtype=float)
        if name in plane.coords and plane[name].dtype.kind in "fiu"
        else np.arange(plane.sizes[name], dtype=float)
        for name in plane.dims
    ]
    x, y = (axes[0], np.zeros(1)) if len(axes) == 1 else (axes[1], axes[0])
    columns = _edges(np.sort(x), 1.0)
    thick = 0.12 * float(columns[-1] - columns[0]) if len(axes) == 1 else _spacing(x)
    rows = _edges(np.sort(y), thick)
    X, Y = np.meshgrid(x, y)
    box = (columns[0], columns[-1], rows[0], rows[-1])
    west, east, south, north = (float(edge) for edge in box)
    shape = plane.shape
    return MapView(
        west, east, south, north, False, shape, X.reshape(shape), Y.reshape(shape), True, False
    )


def _point_view(latitude: np.ndarray, longitude: np.ndarray) -> MapView:
    if not np.any(np.isfinite(latitude) & np.isfinite(longitude)):
        raise ArgumentError(
            "map field",
            expected="finite latitudes and longitudes",
            found="none",
            remedy="look at the coordinates of the input",
        )
    x, round_the_globe = unrolled(longitude)
    reach = np.rad2deg(_reach(latitude, longitude))
    south = max(float(np.nanmin(latitude)) - reach, -90.0)
    north = min(float(np.nanmax(latitude)) + reach, 90.0)
    if round_the_globe:
        west, east = -180.0, 180.0
    else:
        wide = reach / max(np.cos(np.deg2rad((south + north) / 2)), 0.1)
        west, east = float(np.nanmin(x)) - wide, float(np.nanmax(x)) + wide
    return MapView(
        west, east, south, north, True, latitude.shape, x, latitude, False, round_the_globe
    )


def _reach(latitude: np.ndarray, longitude: np.ndarray) -> float:
    """Return half the usual distance between neighbours, in radians."""
    points = _on_sphere(latitude.ravel(), longitude.ravel())
    points = points[np.all(np.isfinite(points), axis=1)]
    if len(points) < 2:
        return float(np.deg2rad(0.5))
    sample = points[:: max(len(points) // 2000, 1)]
    distance, _ = cKDTree(points).query(sample, k=2)
    return float(np.median(distance[:, 1])) / 2


def _on_sphere(latitude: np.ndarray, longitude: np.ndarray) -> np.ndarray:
    phi, lam = np.deg2rad(latitude), np.deg2rad(longitude)
    cosine = np.cos(phi)
    return np.stack([cosine * np.cos(lam), cosine * np.sin(lam), np.sin(phi)], axis=-1)


def _plain_points(view: MapView, x: np.ndarray, y: np.ndarray) -> np.ndarray:
    columns_of_grid = view.x.reshape(-1, view.shape[-1])[0]
    rows_of_grid = view.y.reshape(-1, view.shape[-1])[:, 0]
    if view.full_circle:
        order = np.argsort(columns_of_grid)
        rising = columns_of_grid[order]
        closing = (rising[-1] + rising[0] + 360.0) / 2
        edges = np.concatenate([[closing - 360.0], (rising[1:] + rising[:-1]) / 2, [closing]])
        x = edges[0] + np.mod(x - edges[0], 360.0)
    else:
        order = np.argsort(columns_of_grid)
        edges = _edges(columns_of_grid[order], np.inf)
    column = np.clip(np.searchsorted(edges, x, side="right") - 1, 0, len(order) - 1)
    upward = np.argsort(rows_of_grid)
    bounds = _edges(rows_of_grid[upward], np.inf)
    row = np.clip(np.searchsorted(bounds, y, side="right") - 1, 0, len(upward) - 1)
    return (upward[row][:, None] * view.shape[-1] + order[column][None, :]).astype(np.int64)


def _nearest_points(view: MapView, x: np.ndarray, y: np.ndarray) -> np.ndarray:
    latitude, longitude = view.y.ravel(), view.x.ravel()
    known = np.flatnonzero(np.isfinite(latitude) & np.isfinite(longitude))
    points = _on_sphere(latitude[known], longitude[known])
    tree = cKDTree(points)
    pixels = _on_sphere(*np.broadcast_arrays(y[:, None], x[None, :])).reshape(-1, 3)
    turned = len(view.shape) == 2 and min(view.shape) > 1 and known.size == latitude.size
    radius = _cell_extent(view) if turned else _cell_radius(points, tree)
    # The bound spares the long search from pixels that lie far outside the grid.
    distance, nearest = tree.query(pixels, distance_upper_bound=float(radius.max()), workers=-1)
    missed = ~np.isfinite(distance)
    nearest[missed] = 0
    outside = missed | (
        _beyond_the_rim(view, pixels, nearest) if turned else distance > radius[nearest]
    )
    found = np.where(outside, -1, known[nearest])
    return np.asarray(found.reshape(y.size, x.size))


def _cell_extent(view: MapView) -> np.ndarray:
    """Return how far the corners of the cells of a 2-D grid may lie from their middles."""
    grid = _on_sphere(view.y, view.x)
    steps = [np.linalg.norm(np.gradient(grid, axis=axis), axis=-1) for axis in (0, 1)]
    return np.asarray(0.75 * (steps[0] + steps[1]))


def _cell_radius(points: np.ndarray, tree: cKDTree) -> np.ndarray:
    """Return how far a cell reaches: three quarters of the way to its fourth neighbour."""
    if len(points) < 2:
        return np.full(len(points), np.deg2rad(0.5))
    distance, _ = tree.query(points, k=min(5, len(points)), workers=-1)
    return np.asarray(0.75 * distance[:, -1])


def _beyond_the_rim(view: MapView, pixels: np.ndarray, nearest: np.ndarray) -> np.ndarray:
    """Tell which pixels lie outside a 2-D grid: beyond half a cell from a point of its rim."""
    grid = _on_sphere(view.y, view.x)
    along = [np.gradient(grid, axis=axis).reshape(-1, 3) for axis in (0, 1)]
    rim = np.zeros(view.shape, dtype=bool)
    rim[[0, -1], :] = True
    rim[:, [0, -1]] = True
    outside = np.zeros(len(pixels), dtype=bool)
    at_rim = np.flatnonzero(rim.ravel()[nearest])
    here = nearest[at_rim]
    step = pixels[at_rim] - grid.reshape(-1, 3)[here]
    u, v = along[0][here], along[1][here]
    uu, uv, vv = (np.einsum("ij,ij->i", *pair) for pair in ((u, u), (u, v), (v, v)))
    su, sv = np.einsum("ij,ij->i", step, u), np.einsum("ij,ij->i", step, v)
    determinant = np.maximum(uu * vv - uv**2, 1e-30)
    first, second = (su * vv - sv * uv) / determinant, (sv * uu - su * uv) / determinant
    outside[at_rim] = np.maximum(np.abs(first), np.abs(second)) > 0.54
    return outside
