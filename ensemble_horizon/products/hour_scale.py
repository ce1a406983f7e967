"""The colours of lead times: steps of hours that matter, dark where the limit comes soon."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from ensemble_horizon.products.wording import lead_units
from ensemble_horizon.vocabulary import Status

# Deep water to dry sand: lightness rises from end to end, so the order survives a grey printer
# and every common kind of colour blindness.
_ANCHORS = ("#0b2239", "#12465a", "#2b6b70", "#5a8f7c", "#93b086", "#c9cc99", "#f2e6bf")
_HOUR_STEPS = (1, 2, 3, 6, 12, 24, 48, 72, 120, 240, 480)
_MOST_STEPS = 8

STATUS_COLOURS: dict[Status, tuple[str, str]] = {
    Status.beyond_run: ("#fffdf7", "#c2b79a"),
    Status.at_start: ("#5b1030", "#a65674"),
    Status.no_growth: ("#d8cfe3", "#8d7ba6"),
    Status.no_data: ("#c9cccf", "#c9cccf"),
}


@dataclass(frozen=True)
class HourScale:
    """Rising bounds in lead units, one colour between each two, and the levels of the contours."""

    bounds: tuple[float, ...]
    colours: np.ndarray
    contours: tuple[float, ...]
    below: bool
    above: bool

    def paint(self, values: np.ndarray) -> np.ndarray:
        """Return the colours (..., 3) as bytes of finite ``values``; ends take all beyond them."""
        steps = np.searchsorted(self.bounds, values, side="right") - 1
        return np.asarray(self.colours[np.clip(steps, 0, len(self.colours) - 1)])


def hour_scale(values: np.ndarray, units: str) -> HourScale:
    """Return the scale for a field of lead times.

    The step is the smallest of those that matter on a shift (1, 2, 3, 6, 12, 24, 48 ... hours; 1,
    2, 5 times a power of ten in other units) that covers the middle 98 % in eight steps at most.

    Parameters
    ----------
    values : numpy.ndarray
        Lead times; NaN is passed over.
    units : str
        Units of the leads.

    Examples
    --------
    >>> hour_scale(np.array([20.0, 40.0, 90.0]), "hours").bounds
    (12.0, 24.0, 36.0, 48.0, 60.0, 72.0, 84.0, 96.0)
    """
    known = values[np.isfinite(values)]
    low, high = (np.percentile(known, (1, 99))) if known.size else (0.0, 1.0)
    step = hour_step(float(low), float(high), hours=lead_units(units) == "h", most=_MOST_STEPS)
    first, last = np.floor(low / step + 1e-9), np.ceil(high / step - 1e-9)
    last = max(last, first + 2)
    bounds = tuple(float(number * step) for number in np.arange(first, last + 1))
    contours = tuple(
        bound
        for bound in bounds[1:-1]
        if abs(bound / (2 * step) - round(bound / (2 * step))) < 1e-6
    )
    return HourScale(
        bounds=bounds,
        colours=ramp(len(bounds) - 1),
        contours=contours or bounds[1:-1],
        below=bool(known.size and known.min() < bounds[0]),
        above=bool(known.size and known.max() > bounds[-1]),
    )


def ramp(count: int) -> np.ndarray:
    """Return ``count`` colours (count, 3) as bytes, dark to light."""
    anchors = np.array([_rgb(colour) for colour in _ANCHORS], dtype=float)
    position = np.linspace(0, len(anchors) - 1, count) if count > 1 else np.array([3.0])
    columns = [np.interp(position, np.arange(len(anchors)), part) for part in anchors.T]
    return np.stack(columns, axis=-1).round().astype(np.uint8)


def status_colours(status: Status, rows: np.ndarray, columns: np.ndarray) -> np.ndarray:
    """Return the tone and hatch of a status as bytes (..., 3) at pixels ``rows``, ``columns``.

    ``beyond_run`` leans one way, ``at_start`` the other, ``no_growth`` lies flat, ``no_data`` is
    plain, so that they differ without colour too.
    """
    ground, ink = (np.array(_rgb(colour), np.uint8) for colour in STATUS_COLOURS[status])
    if status == Status.beyond_run:
        hatch = (rows + columns) % 12 < 2
    elif status == Status.at_start:
        hatch = (rows - columns) % 9 < 2
    elif status == Status.no_growth:
        hatch = rows % 8 < 2
    else:
        hatch = np.zeros(np.broadcast_shapes(rows.shape, columns.shape), dtype=bool)
    hatch = np.broadcast_to(hatch, np.broadcast_shapes(rows.shape, columns.shape))
    return np.asarray(np.where(hatch[..., None], ink, ground))


def hour_step(low: float, high: float, *, hours: bool, most: int) -> float:
    """Return the smallest step that covers ``low`` to ``high`` in ``most`` steps."""
    if hours:
        steps = [float(step) for step in _HOUR_STEPS]
        steps += [240.0 * 2**power for power in range(2, 12)]
    else:
        scale = 10.0 ** np.floor(np.log10(max(high - low, abs(high), 1e-9)))
        steps = [scale * part for part in (0.01, 0.02, 0.05, 0.1, 0.2, 0.5, 1, 2, 5, 10)]
    for step in steps:
        if np.ceil(high / step - 1e-9) - np.floor(low / step + 1e-9) <= most:
            return step
    return steps[-1]


def _rgb(colour: str) -> tuple[int, int, int]:
    red, green, blue = (int(colour[place : place + 2], 16) for place in (1, 3, 5))
    return red, green, blue
