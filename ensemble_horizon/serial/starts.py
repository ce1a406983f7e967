"""Starts in order of time, none of them twice."""

from __future__ import annotations

from typing import TypeVar

import numpy as np
import xarray as xr

from ensemble_horizon.checks import require_dimension
from ensemble_horizon.errors import ArgumentError

Labelled = TypeVar("Labelled", xr.DataArray, xr.Dataset)


def in_order(data: Labelled, dim: str, argument: str) -> Labelled:
    """Sort by the labels of the starts; without labels they are taken as they stand.

    Raises
    ------
    ArgumentError
        if there is no such dimension, fewer than two starts, or a start stands there twice.

    Examples
    --------
    >>> data = xr.DataArray([1.0, 2.0], dims="start", coords={"start": [12, 0]})
    >>> in_order(data, "start", "data").values.tolist()
    [2.0, 1.0]
    """
    require_dimension(data, dim, argument)
    if data.sizes[dim] < 2:
        raise ArgumentError(
            argument,
            expected="several starts",
            found=f"{data.sizes[dim]}",
            remedy=f"join the starts along {dim!r}, for instance with xarray.concat",
        )
    if dim not in data.coords:
        return data
    labels = np.asarray(data[dim].values)
    order = np.argsort(labels, kind="stable")
    same = labels[order][1:] == labels[order][:-1]
    if same.any():
        twice = start_names(np.unique(labels[order][1:][same]))
        raise ArgumentError(
            f"{argument}[{dim!r}]",
            expected="every start once",
            found=f"twice or more: {', '.join(twice[:3])}" + (" ..." if len(twice) > 3 else ""),
            remedy="drop the doubled ones; counted twice they would pass for evidence",
        )
    return data.isel({dim: order})


def start_names(labels: np.ndarray) -> list[str]:
    """Names of starts for messages and attributes: times to the minute, else as they are.

    Examples
    --------
    >>> start_names(np.array(["2024-01-05T12"], dtype="datetime64[ns]"))
    ['2024-01-05T12:00']
    """
    if np.issubdtype(labels.dtype, np.datetime64):
        return [str(label) for label in np.datetime_as_string(labels, unit="m")]
    return [str(label) for label in labels]
