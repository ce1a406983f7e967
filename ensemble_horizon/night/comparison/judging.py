"""What is told apart among all rows of a comparison: control of false discoveries."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
import xarray as xr

from ensemble_horizon.versions import false_discovery


def judge_together(parts: Sequence[xr.Dataset]) -> None:
    """Judge the p-values of all parts together, and add what was found to each.

    Parameters
    ----------
    parts : sequence of Dataset with ``p_value``, on any dimensions
        Get ``adjusted_p_value`` and ``survives``.

    Examples
    --------
    >>> parts = [xr.Dataset({"p_value": ("place", [p])}) for p in (0.01, 0.08)]
    >>> judge_together(parts)
    >>> [float(part.adjusted_p_value[0]) for part in parts]
    [0.02, 0.08]
    """
    if not parts:
        return
    rows = xr.DataArray(
        np.concatenate([part["p_value"].values.ravel() for part in parts]), dims="row"
    )
    judged = false_discovery(rows)
    begin = 0
    for part in parts:
        dims, shape = part["p_value"].dims, part["p_value"].shape
        here = slice(begin, begin + part["p_value"].size)
        for name, key in (("adjusted_p_value", "adjusted"), ("survives", "significant")):
            values = judged[key].values[here].reshape(shape)
            part[name] = (dims, values, judged[key].attrs)
        begin = here.stop
