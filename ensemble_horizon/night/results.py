"""What comes out of one variable, as labelled datasets that the products are made from."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
import xarray as xr

from ensemble_horizon.horizon.criteria import Criterion
from ensemble_horizon.horizon.curve_growth import Growth
from ensemble_horizon.horizon.curve_limits import Curve, Limit
from ensemble_horizon.horizon.map_limits import LAW_NAMES
from ensemble_horizon.vocabulary import (
    COORDINATE_ATTRIBUTES,
    CRITERION,
    LEAD,
    PLACE,
    START,
    STATUS_ATTRIBUTES,
)

ALL_STARTS = "all"

LAW_ATTRIBUTES = {
    "long_name": "law of error growth",
    "flag_values": list(range(len(LAW_NAMES))),
    "flag_meanings": " ".join(LAW_NAMES),
}


@dataclass(frozen=True)
class VariableResult:
    """Curves of one variable, and its maps where they were asked for."""

    curves: xr.Dataset
    maps: xr.Dataset | None


@dataclass(frozen=True)
class Frame:
    """What all results of one variable share.

    Parameters
    ----------
    variable, long_name, units : str
        ``units`` as the results are given.
    lead : (L,)
    lead_units : str
    criteria : mapping of label to Criterion
    confidence : float
    """

    variable: str
    long_name: str
    units: str
    lead: np.ndarray
    lead_units: str
    criteria: dict[str, Criterion]
    confidence: float
    hold: float

    @property
    def rate_units(self) -> str:
        """Units of a growth rate."""
        return "1" if self.lead_units == "1" else f"{self.lead_units.removesuffix('s')}-1"

    def attributes(self, name: str) -> dict[str, Any]:
        """CF attributes of a result by its name."""
        base, _, end = name.rpartition("_")
        if base and end in ("low", "high"):
            inner = self.attributes(base)
            side = "lower" if end == "low" else "upper"
            text = f"{side} end of the {self.confidence:.0%} interval of {inner['long_name']}"
            return {"long_name": text, "units": inner["units"]}
        return dict(self._table()[name])

    def _table(self) -> dict[str, dict[str, Any]]:
        time, size = self.lead_units, self.units
        return {
            "spread": {"long_name": f"ensemble spread of {self.long_name}", "units": size},
            "fitted": {"long_name": "fitted law of error growth", "units": size},
            "growth_rate": {"long_name": "growth rate of small errors", "units": self.rate_units},
            "doubling_time": {"long_name": "doubling time of small errors", "units": time},
            "doubling_time_at_start": {
                "long_name": "doubling time at the size the forecast starts with",
                "units": time,
            },
            "initial_error": {"long_name": "fitted initial error", "units": size},
            "saturation": {"long_name": "fitted saturation level", "units": size},
            "source": {"long_name": "source of error variance per unit of lead",
                       "units": f"({size})2 {self.rate_units}"},
            "coefficient": {"long_name": "coefficient of the power law", "units": "1"},
            "exponent": {"long_name": "exponent of the power law", "units": "1"},
            "law": LAW_ATTRIBUTES,
            "members": {"long_name": "members used", "units": "1"},
            "threshold": {"long_name": "threshold of the criterion"},
            "horizon": {"long_name": "horizon", "units": time},
            "low": {"long_name": f"lower end of the {self.confidence:.0%} interval of the horizon",
                    "units": time},
            "high": {"long_name": f"upper end of the {self.confidence:.0%} interval of the horizon",
                     "units": time},
            "status": STATUS_ATTRIBUTES,
            "projected": {"long_name": "horizon that the fitted law projects beyond the run",
                          "units": time},
            "chance": {"long_name": "share of members beyond the distance from the median",
                       "units": "1"},
        }  # fmt: skip


@dataclass(frozen=True)
class CurveRow:
    """One start and place: the curve, its growth, its limits."""

    curve: Curve
    growth: Growth
    limits: Sequence[Limit]
    members: int


def curves_dataset(
    frame: Frame,
    starts: np.ndarray,
    start_labels: Sequence[str],
    places: Sequence[tuple[str, str]],
    rows: Sequence[Sequence[CurveRow]],
) -> xr.Dataset:
    """Curves, fits and horizons: rows by start and place."""
    shape = (len(rows), len(places))
    flat = [row for line in rows for row in line]
    data: dict[str, tuple[tuple[str, ...], np.ndarray]] = {}

    def put(name: str, dims: tuple[str, ...], values: list[Any], kind: type = float) -> None:
        array: np.ndarray = np.asarray(values, dtype=kind)
        data[name] = ((START, PLACE, *dims), array.reshape(*shape, *array.shape[1:]))

    put("spread", (LEAD,), [row.curve.spread for row in flat])
    bands = [row.curve.noise.band(frame.confidence) for row in flat]
    put("spread_low", (LEAD,), [r.curve.spread * b[0] for r, b in zip(flat, bands, strict=True)])
    put("spread_high", (LEAD,), [r.curve.spread * b[1] for r, b in zip(flat, bands, strict=True)])
    put("fitted", (LEAD,), [row.growth.fitted for row in flat])
    for name in flat[0].growth.values:
        put(name, (), [row.growth.values[name] for row in flat])
    put("law", (), [LAW_NAMES.index(row.growth.law) for row in flat], np.int8)
    put("members", (), [row.members for row in flat], np.int32)
    for name in ("threshold", "horizon", "low", "high", "projected"):
        put(name, (CRITERION,), [[getattr(item, name) for item in row.limits] for row in flat])
    put("status", (CRITERION,), [[item.status for item in row.limits] for row in flat], np.int8)
    if any(row.curve.shares for row in flat):
        put("chance", (CRITERION, LEAD), [_chances(frame, row.curve) for row in flat])
    dataset = xr.Dataset({name: (dims, values) for name, (dims, values) in data.items()})
    dataset = dataset.assign_coords(
        {
            START: (START, starts, COORDINATE_ATTRIBUTES[START]),
            "start_label": (START, list(start_labels)),
            PLACE: [name for name, _ in places],
            "place_kind": (PLACE, [kind for _, kind in places]),
            LEAD: (LEAD, frame.lead, {**COORDINATE_ATTRIBUTES[LEAD], "units": frame.lead_units}),
            **criterion_coords(frame),
        }
    )
    return _described(dataset, frame)


def without_pooled(curves: xr.Dataset) -> xr.Dataset:
    """The single starts, without that which stands for all of them."""
    return curves.isel({START: np.flatnonzero(curves["start_label"].values != ALL_STARTS)})


def maps_dataset(
    frame: Frame,
    starts: np.ndarray,
    start_labels: Sequence[str],
    space: tuple[tuple[str, ...], tuple[int, ...], dict[str, xr.DataArray]],
    fields: Sequence[dict[str, np.ndarray]],
) -> xr.Dataset:
    """Fits and horizons at every grid point, one dict of fields per start."""
    dims, shape, coords = space
    data = {}
    for name in fields[0]:
        values = np.stack([field[name] for field in fields])
        head = (START, CRITERION) if values.ndim == 3 else (START,)
        data[name] = ((*head, *dims), values.reshape(*values.shape[:-1], *shape))
    dataset = xr.Dataset(data, coords=dict(coords))
    dataset = dataset.assign_coords(
        {
            START: (START, starts, COORDINATE_ATTRIBUTES[START]),
            "start_label": (START, list(start_labels)),
            **criterion_coords(frame),
        }
    )
    return _described(dataset, frame)


def criterion_coords(frame: Frame) -> dict[str, tuple[str, list[str]]]:
    """Labels, kinds and threshold units of the criteria."""
    criteria = frame.criteria.values()
    return {
        CRITERION: (CRITERION, list(frame.criteria)),
        "criterion_kind": (CRITERION, [item.kind for item in criteria]),
        "criterion_rule": (CRITERION, [item.label for item in criteria]),
        "threshold_units": (CRITERION, [item.threshold_units(frame.units) for item in criteria]),
    }


def _chances(frame: Frame, curve: Curve) -> list[np.ndarray]:
    nothing = np.full(frame.lead.size, np.nan)
    return [
        curve.shares.get(getattr(item, "beyond", float("nan")), nothing)
        for item in frame.criteria.values()
    ]


def _described(dataset: xr.Dataset, frame: Frame) -> xr.Dataset:
    for name, variable in dataset.data_vars.items():
        variable.attrs.update(frame.attributes(str(name)))
    dataset.attrs.update(
        variable=frame.variable,
        long_name=frame.long_name,
        units=frame.units,
        lead_units=frame.lead_units,
        last_lead=float(frame.lead[-1]),
        confidence=frame.confidence,
        hold=frame.hold,
    )
    return dataset
