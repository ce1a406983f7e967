"""Mean paired difference between two versions: labelled front of `serial_mean`."""

from __future__ import annotations

from typing import Any

import numpy as np
import xarray as xr
from scipy import special

from ensemble_horizon.serial import REASON_ATTRIBUTES, SerialMean, mean_noise, serial_mean


def mean_difference(
    a: xr.DataArray,
    b: xr.DataArray,
    dim: str,
    confidence: float,
    name: str,
    text: str,
    shared: tuple[np.ndarray, float] | None = None,
) -> xr.Dataset:
    """Mean of b - a over the starts at which both have a value, with interval and p-value.

    Parameters
    ----------
    a, b : DataArray on the same starts and points
    name, text : str, what the difference is called, short and long
    shared : (variance (K,) or scalar, degrees of freedom), optional
        Noise of the mean that all starts have in common, which their scatter does not tell.

    Returns
    -------
    Dataset without ``dim``: the difference, ``_low``, ``_high``, ``p_value``, ``mean_a``,
    ``mean_b``, ``starts`` and ``reason``.
    """
    both = a.notnull() & b.notnull()
    rest = [str(item) for item in a.dims if item != dim]
    values = (b - a).transpose(dim, *rest)
    shape = values.shape[1:]
    series = values.values.reshape(values.sizes[dim], -1)
    found = serial_mean(series, confidence)
    if shared is not None:
        found = _with_shared(found, series, shared, confidence)
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


def _with_shared(
    found: SerialMean, series: np.ndarray, shared: tuple[np.ndarray, float], confidence: float
) -> SerialMean:
    """The same mean with noise that all starts share; freedom by the rule of Satterthwaite 1946."""
    own, (variance, dof) = mean_noise(series), shared
    total = own.variance + variance
    with np.errstate(invalid="ignore", divide="ignore"):
        free = total**2 / (own.variance**2 / own.dof + variance**2 / dof)
        error = np.sqrt(total)
        reach = special.stdtrit(free, 1 - (1 - confidence) / 2) * error
        p_value = 2 * special.stdtr(free, -np.abs(found.mean) / error)
    return found._replace(
        low=found.mean - reach, high=found.mean + reach, p_value=p_value, dof=free
    )
