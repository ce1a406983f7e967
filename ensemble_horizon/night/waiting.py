"""Time to the limit over the starts of an estimate."""

from __future__ import annotations

import numpy as np
import xarray as xr

from ensemble_horizon.horizon import time_to_limit
from ensemble_horizon.night.results import VariableResult, without_pooled
from ensemble_horizon.vocabulary import LEAD, START

_LEADS = 121  # at which shares are told: steps fine enough to be seen as steps


def shares_of(limits: xr.Dataset, first_lead: float) -> xr.Dataset:
    """Share of starts still usable at each lead, from limits (start, place, criterion).

    Attributes ``last_lead`` and ``confidence`` are those of the curves.
    """
    end = float(limits.attrs["last_lead"])
    return time_to_limit(
        limits, last_lead=end, first_lead=first_lead, leads=np.linspace(first_lead, end, _LEADS),
        confidence=float(limits.attrs["confidence"]),
    )  # fmt: skip


def shares_of_estimate(results: list[VariableResult]) -> list[xr.Dataset]:
    """Time to the limit of every variable; nothing where there is one start or one lead only."""
    found = []
    for result in results:
        limits = without_pooled(result.curves)[["horizon", "status"]]
        leads = result.curves[LEAD].values
        if limits.sizes[START] > 1 and leads.size > 1:
            shares = shares_of(limits, float(leads[0]))
            found.append(shares.assign_attrs(start_count=limits.sizes[START]))
    return found
