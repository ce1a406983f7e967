"""Mean paired difference between two versions: labelled front of `serial_mean`."""

from __future__ import annotations

from typing import Any

import numpy as np
import xarray as xr

from ensemble_horizon.serial import REASON_ATTRIBUTES, serial_mean


def mean_difference(
    a: xr.DataArray, b: xr.DataArray, dim: str, confidence: float, name: str, text: str
) -> xr.Dataset:
    """Mean of b - a over the starts at which both have a value, with interval and p-value.

    Parameters
    ----------
    a, b : DataArray on the same starts and points
    name, text : str, what the difference is called, short and long

    Returns
    -------
    Dataset without ``dim``: the difference, ``_low``, ``_high``, ``p_value``, ``mean_a``,
    ``mean_b``, ``starts`` and ``reason``.
    """
    both = a.notnull() & b.notnull()
    rest = [str(item) for item in a.dims if item != dim]
    values = (b - a).transpose(dim, *rest)
    shape = values.shape[1:]
    found = serial_mean(values.values.reshape(values.sizes[dim], -1), confidence)
    units = {"units": str(a.attrs.get("units", "1"))}

    def labelled(column: np.ndarray, attributes: dict[str, Any]) -> tuple[Any, ...]:
        return rest, column.reshape(shape), attributes

    kept = {key: coord for key, coord in a.coords.items() if dim not in coord.dims}
    result = xr.Dataset(
        {
            name: labelled(found.mean, {"long_name": text, **units}),
            f"{name}_low": labelled(found.low, {"long_name": f"lower end of {text}", **units}),
            f"{name}_high": labelled(found.high, {"long_name": f"upper end of {text}", **units}),
            "p_value": labelled(
                found.p_value, {"long_name": "p-value against no difference", "units": "1"}
            ),
            "starts": labelled(found.starts, {"long_name": "starts compared", "units": "1"}),
            "reason": labelled(found.reason, dict(REASON_ATTRIBUTES)),
        },
        coords=kept,
    )
    for key, data in (("mean_a", a), ("mean_b", b)):
        mean = data.where(both).mean(dim).transpose(*rest)
        result[key] = labelled(mean.values, {"long_name": f"mean of version {key[-1]}", **units})
    return result
