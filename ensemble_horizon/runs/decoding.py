"""From stored numbers to values: fill values, packing, unsigned integers.

The attributes are those of the NetCDF Users Guide, appendix A (attribute conventions): _FillValue,
missing_value, valid_min, valid_max, valid_range, scale_factor, add_offset, _Unsigned.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any, TypeAlias

import netCDF4
import numpy as np

PACKING = (
    "_FillValue", "missing_value", "valid_min", "valid_max", "valid_range", "scale_factor",
    "add_offset", "_Unsigned",
)  # fmt: skip

StoredVariable: TypeAlias = "netCDF4.Variable[Any]"


@dataclass(frozen=True)
class Decoder:
    """How one variable of one file is decoded; see `decoder`."""

    stored: np.dtype
    dtype: np.dtype
    missing: tuple[float | int, ...]
    low: float | None
    high: float | None
    scale: float
    offset: float

    def decode(self, raw: np.ndarray, out: np.ndarray) -> None:
        """Write the values of ``raw`` into ``out`` (same shape), with NaN where missing."""
        if raw.dtype != self.stored:
            native = raw.astype(raw.dtype.newbyteorder("="), copy=False)
            unsigned = self.stored.kind == "u" and native.dtype.kind == "i"
            raw = native.view(self.stored) if unsigned else native.astype(self.stored, copy=False)
        if self.scale == 1.0 and self.offset == 0.0:
            out[...] = raw
        else:
            values = np.multiply(raw, self.scale, dtype=np.float64)
            values += self.offset
            out[...] = values
        for value in self.missing:
            gone = raw == value
            if gone.any():
                out[gone] = np.nan
        if self.low is not None or self.high is not None:
            outside = np.zeros(raw.shape, dtype=bool)
            if self.low is not None:
                outside |= raw < self.low
            if self.high is not None:
                outside |= raw > self.high
            out[outside] = np.nan


def decoder(dtype: np.dtype, attributes: Mapping[str, object]) -> Decoder:
    """The decoder of a variable stored as ``dtype`` with these attributes.

    The values are float32, and float64 for 4- and 8-byte integers and for float64. Packing is
    undone in float64, then rounded once.

    Examples
    --------
    >>> packing = {"scale_factor": 0.5, "add_offset": 10.0, "_FillValue": -1}
    >>> unpack = decoder(np.dtype("i2"), packing)
    >>> out = np.empty(3, dtype=unpack.dtype)
    >>> unpack.decode(np.array([0, -1, 4], dtype="i2"), out)
    >>> out
    array([10., nan, 12.], dtype=float32)
    """
    stored = np.dtype(dtype).newbyteorder("=")
    if str(attributes.get("_Unsigned", "false")).lower() == "true" and stored.kind == "i":
        stored = np.dtype(f"u{stored.itemsize}")
    wide = stored == np.float64 or (stored.kind in "iu" and stored.itemsize >= 4)
    low, high = _limits(attributes, stored)
    return Decoder(
        stored=stored,
        dtype=np.dtype(np.float64 if wide else np.float32),
        missing=_missing(attributes, stored),
        low=low,
        high=high,
        scale=_number(attributes.get("scale_factor", 1.0)),
        offset=_number(attributes.get("add_offset", 0.0)),
    )


def _missing(attributes: Mapping[str, object], stored: np.dtype) -> tuple[float | int, ...]:
    found: list[float | int] = []
    for key in ("_FillValue", "missing_value"):
        if key in attributes:
            for value in np.atleast_1d(_as_stored(attributes[key], stored)):
                found.append(value.item())
    if "_FillValue" not in attributes and stored.itemsize > 1:
        # What the library leaves in cells that were never written.
        code = f"{stored.kind}{stored.itemsize}"
        if code in netCDF4.default_fillvals:
            found.append(np.asarray(netCDF4.default_fillvals[code]).astype(stored).item())
    return tuple(value for value in dict.fromkeys(found) if value == value)


def _as_stored(value: object, stored: np.dtype) -> np.ndarray:
    array = np.asarray(value)
    if array.dtype.kind in "SU":
        array = array.astype(np.float64)
    if stored.kind == "u" and array.dtype.kind == "i":
        return array.astype(array.dtype.str.replace("i", "u")).astype(stored)
    return array.astype(stored)


def _limits(
    attributes: Mapping[str, object], stored: np.dtype
) -> tuple[float | None, float | None]:
    if "valid_range" in attributes:
        pair = np.ravel(_as_stored(attributes["valid_range"], stored))
        if pair.size == 2:
            return pair[0].item(), pair[1].item()
    low, high = (
        np.ravel(_as_stored(attributes[key], stored))[0].item() if key in attributes else None
        for key in ("valid_min", "valid_max")
    )
    return low, high


def _number(value: object) -> float:
    return float(np.ravel(np.asarray(value, dtype=np.float64))[0])
