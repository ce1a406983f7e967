"""Ensemble runs of toy systems in the layout that real forecasts are opened in."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
import numpy.typing as npt
import xarray as xr

from ensemble_horizon.errors import ArgumentError
from ensemble_horizon.toys.dynamics import Field, System, Time, require_states
from ensemble_horizon.toys.integration import integrate
from ensemble_horizon.toys.norms import Array
from ensemble_horizon.vocabulary import (
    CONVENTIONS,
    COORDINATE_ATTRIBUTES,
    HOURS,
    LEAD,
    MEMBER,
    START,
    VALID,
)

NOMINAL_START = "2000-01-01T00:00"


def run_ensemble(
    system: System,
    initial: npt.ArrayLike,
    *,
    steps: int,
    dt: float | None = None,
    every: int = 1,
    start: str | np.datetime64 | Sequence[str] = NOMINAL_START,
    on_grid: bool = True,
    time: Time = 0.0,
) -> xr.Dataset:
    """Run every member forward and return the canonical Dataset.

    Parameters
    ----------
    system : System
    initial : array (member, N) or (start, member, N)
        Initial states.
    steps, dt, every
        As for `ensemble_horizon.toys.integration.integrate`.
    start : date or sequence of dates
        Nominal start of the forecast, one per start.
    on_grid : bool
        Fields in space where the system has them; False gives one series per variable.
    time : float or array (start, 1)
        Model time of the starts, for a system driven from outside.

    Returns
    -------
    Dataset
        Dimensions ``(start, lead, member, *space)``. ``lead`` has units "hours" where the system
        has a physical clock, and then ``valid`` = start + lead; otherwise units "1" (units of model
        time) and no ``valid``.

    Raises
    ------
    ArgumentError
        If the shape of ``initial`` does not fit, or a state stops being finite.

    Examples
    --------
    >>> from ensemble_horizon import toys
    >>> lorenz = toys.system("lorenz-63")
    >>> initial = toys.perturb(lorenz, lorenz.default_state(), 5, amplitude=1e-3, seed=1)
    >>> run = run_ensemble(lorenz, initial, steps=200, every=100)
    >>> dict(run.sizes), run.lead.values.tolist(), run.lead.attrs["units"]
    ({'start': 1, 'lead': 3, 'member': 5}, [0.0, 1.0, 2.0], '1')
    """
    states = require_states(system, initial, "initial")
    if states.ndim == 2:
        states = states[None]
    if states.ndim != 3:
        raise ArgumentError(
            "initial",
            expected="shape (member, variable) or (start, member, variable)",
            found=f"shape {states.shape}",
            remedy="add or drop leading axes",
        )
    starts = _require_starts(start, states.shape[0])
    run = integrate(system, states, steps, dt, every, time)
    # From (lead, start, member, N): starts come first in the canonical layout.
    ordered = np.moveaxis(run.states, 1, 0)
    fields = system.fields_of(ordered) if on_grid else System.fields_of(system, ordered)
    return _label(system, fields, run.times, starts, states.shape[1], on_grid)


def _require_starts(
    start: str | np.datetime64 | Sequence[str], count: int
) -> npt.NDArray[np.datetime64]:
    try:
        starts = np.atleast_1d(np.asarray(start, dtype="datetime64[ns]"))
    except ValueError as error:
        raise ArgumentError(
            "start",
            expected="a date such as 2000-01-01T00:00",
            found=repr(start),
            remedy="correct the date",
        ) from error
    if starts.shape != (count,) or np.any(np.isnat(starts)):
        raise ArgumentError(
            "start",
            expected=f"{count} dates, one per start in initial",
            found=f"{starts.size}",
            remedy="give a list of as many dates as initial has starts",
        )
    return starts


def _label(
    system: System,
    fields: tuple[Field, ...],
    times: Array,
    starts: npt.NDArray[np.datetime64],
    members: int,
    on_grid: bool,
) -> xr.Dataset:
    """Attach dimensions, coordinates and attributes."""
    hours = system.hours_per_time_unit
    lead = times if hours is None else times * hours
    # A third of a day in binary is not eight hours on the dot; a lead is meant to be.
    lead = np.round(lead, 9)
    data = {
        field.name: ((START, LEAD, MEMBER, *field.dims), field.values, field.attributes)
        for field in fields
    }
    dataset = xr.Dataset(
        data,
        coords={
            START: (START, starts, COORDINATE_ATTRIBUTES[START]),
            LEAD: (LEAD, lead, {**COORDINATE_ATTRIBUTES[LEAD], "units": HOURS if hours else "1"}),
            MEMBER: (MEMBER, np.arange(members), COORDINATE_ATTRIBUTES[MEMBER]),
        },
        attrs={
            "Conventions": CONVENTIONS,
            "title": system.title,
            "source": system.source,
            **{f"parameter_{name}": p.value for name, p in system.parameters.items()},
        },
    )
    if hours:
        span = np.round(lead * 3600e9).astype("timedelta64[ns]")
        valid = ((START, LEAD), starts[:, None] + span[None, :], COORDINATE_ATTRIBUTES[VALID])
        dataset = dataset.assign_coords({VALID: valid})
    return dataset.assign_coords(system.coordinates() if on_grid else {})
