"""Horizons as waiting times: what a status says of the time to the limit."""

from __future__ import annotations

from typing import NamedTuple

import numpy as np
import xarray as xr

from ensemble_horizon.checks import require_positive
from ensemble_horizon.errors import ArgumentError
from ensemble_horizon.vocabulary import LEAD, Status


class WaitingTimes(NamedTuple):
    """Times to the limit of many starts.

    Parameters
    ----------
    time : DataArray, lead units; the last lead where the limit is later; NaN without data
    reached : DataArray of bool, whether the limit was reached at that time
    last_lead : DataArray or scalar, where the runs end
    first_lead : float
    """

    time: xr.DataArray
    reached: xr.DataArray
    last_lead: xr.DataArray
    first_lead: float


def waiting_times(
    horizons: xr.Dataset,
    argument: str,
    last_lead: xr.DataArray | float | None,
    first_lead: float | None,
) -> WaitingTimes:
    """Waiting times of horizons with a status.

    ``beyond_run`` and ``no_growth`` are known only to be later than the last lead; ``at_start``
    counts as reached at the first lead; ``no_data`` is left out.

    Parameters
    ----------
    horizons : Dataset with ``horizon`` and ``status``
    argument : str, what messages call it
    last_lead : DataArray (start) or float, optional; from the coordinate ``lead`` where not given
    first_lead : float, optional; likewise, and zero where there is no such coordinate

    Raises
    ------
    ArgumentError
        if a variable is missing, the last lead is not known, or a horizon lies beyond it.

    Examples
    --------
    >>> horizons = xr.Dataset({"horizon": ("start", [30.0, np.nan]), "status": ("start", [0, 1])})
    >>> waiting_times(horizons, "horizons", 48.0, None).time.values.tolist()
    [30.0, 48.0]
    """
    missing = [name for name in ("horizon", "status") if name not in horizons]
    if missing:
        raise ArgumentError(
            argument,
            expected="the dataset that horizon gives, with horizon and status",
            found=f"variables {sorted(map(str, horizons.data_vars))}",
            remedy="call horizon for all starts, or join its results along start",
        )
    first, last = _ends(horizons, argument, last_lead, first_lead)
    status, horizon = horizons["status"], horizons["horizon"].astype(float)
    reached = status == Status.reached
    too_late = reached & ~(horizon <= last * (1 + 1e-6))
    if bool(too_late.any()):
        found = horizon.where(too_late).max().item()
        raise ArgumentError(
            "last_lead",
            expected=f"a lead at or after every horizon of {argument}",
            found=f"a horizon of {found:g} with the status reached",
            remedy="give the last lead of these runs, in the units of the horizons",
        )
    at_start = status == Status.at_start
    known = status != Status.no_data
    # In this order, so that the dimensions stay in that of the horizons.
    time = horizon.where(reached, last).where(~at_start, first).where(known)
    return WaitingTimes(time.clip(max=last), reached | at_start, last, first)


def _ends(
    horizons: xr.Dataset,
    argument: str,
    last_lead: xr.DataArray | float | None,
    first_lead: float | None,
) -> tuple[float, xr.DataArray]:
    known = horizons[LEAD].values if LEAD in horizons.coords else None
    if last_lead is None and known is None:
        raise ArgumentError(
            "last_lead",
            expected=f"the lead at which the runs of {argument} end",
            found="nothing, and no coordinate lead to take it from",
            remedy="pass last_lead=, for instance float(curve.lead[-1])",
        )
    if last_lead is None:
        assert known is not None
        last_lead = float(np.max(known))
    if first_lead is None:
        first_lead = 0.0 if known is None else float(np.min(known))
    first = require_positive(first_lead, "first_lead", zero=True)
    last = xr.DataArray(last_lead).astype(float)
    if not bool((last > first).all()):
        raise ArgumentError(
            "last_lead",
            expected=f"a finite lead after the first, {first:g}",
            found=f"{last.min().item():g}",
            remedy="give the leads at which the runs begin and end",
        )
    return first, last
