"""Leads as times of day, and as ticks of the axis that all figures of the page share."""

from __future__ import annotations

from dataclasses import dataclass
from datetime import datetime, timedelta

import numpy as np
import xarray as xr

from ensemble_horizon.products.wording import lead_number, lead_units
from ensemble_horizon.vocabulary import START

_DAYS = ("Mon", "Tue", "Wed", "Thu", "Fri", "Sat", "Sun")
_MONTHS = ("Jan", "Feb", "Mar", "Apr", "May", "Jun", "Jul", "Aug", "Sep", "Oct", "Nov", "Dec")
_HOURS = {"h": 1.0, "d": 24.0}
_STEPS = (1, 2, 3, 6, 12, 24, 48, 72, 120, 240, 480, 960)
_MOST_TICKS = 12


@dataclass(frozen=True)
class Tick:
    """A tick of the lead axis: its share of the width in percent, and what stands there."""

    share: float
    label: str
    day: str
    minor: bool


@dataclass(frozen=True)
class Clock:
    """The start of the forecast and the units of its leads.

    ``start`` is None where the calendar is not that of the wall, or the leads are no times: then
    there are leads and no times of day.
    """

    start: datetime | None
    units: str

    def at(self, lead: float, *, zone: str = " UTC") -> str:
        """Return the time of day at a lead: ``Mon 17 Feb 17:00 UTC``; empty where there is none.

        ``zone`` is what stands behind it, nothing where the zone is told elsewhere.

        Examples
        --------
        >>> Clock(datetime(2031, 2, 14), "hours").at(89.0)
        'Mon 17 Feb 17:00 UTC'
        """
        moment = self._moment(lead)
        return f"{_date(moment)} {moment:%H:%M}{zone}" if moment else ""

    def day(self, lead: float) -> str:
        """Return the day at a lead: ``Mon 17``."""
        moment = self._moment(lead)
        return f"{_DAYS[moment.weekday()]} {moment.day}" if moment else ""

    def ticks(self, last: float) -> tuple[Tick, ...]:
        """Return the ticks from no lead to ``last``; every second one is minor."""
        step = self._step(last)
        leads = np.arange(0, last / step + 1e-9) * step
        return tuple(
            Tick(
                share=round(100 * float(lead) / last, 3),
                label=lead_number(float(lead), self.units) if lead else "0",
                day=self.day(float(lead)) if self._whole_days(step) else "",
                minor=bool(number % 2),
            )
            for number, lead in enumerate(leads)
        )

    def _step(self, last: float) -> float:
        if lead_units(self.units) == "h":
            fitting = [step for step in _STEPS if last / step <= _MOST_TICKS]
            return float(fitting[0]) if fitting else float(_STEPS[-1])
        scale = 10.0 ** np.floor(np.log10(last))
        return next(
            float(scale * part)
            for part in (0.1, 0.2, 0.5, 1.0, 2.0)
            if last / (scale * part) <= _MOST_TICKS
        )

    def _whole_days(self, step: float) -> bool:
        hours = step * _HOURS.get(lead_units(self.units), 0.0)
        return hours > 0 and hours % 24 == 0

    def _moment(self, lead: float) -> datetime | None:
        hours = _HOURS.get(lead_units(self.units))
        if self.start is None or hours is None or not np.isfinite(lead):
            return None
        moment = self.start + timedelta(hours=lead * hours)
        # To the whole hour, as the limits themselves are told.
        return (moment + timedelta(minutes=30)).replace(minute=0, second=0, microsecond=0)


def clock_of(curves: xr.Dataset, units: str) -> Clock:
    """Return the clock of curves of one start."""
    start = curves[START].values[0]
    if not isinstance(start, np.datetime64) or np.isnat(start):
        return Clock(None, units)
    return Clock(start.astype("datetime64[s]").item(), units)


def moment_words(moment: datetime) -> str:
    """Return a date and time as people read it.

    Examples
    --------
    >>> moment_words(datetime(2031, 2, 14, 5, 12))
    'Fri 14 Feb 2031, 05:12 UTC'
    """
    return f"{_date(moment)} {moment.year}, {moment:%H:%M} UTC"


def _date(moment: datetime) -> str:
    return f"{_DAYS[moment.weekday()]} {moment.day} {_MONTHS[moment.month - 1]}"
