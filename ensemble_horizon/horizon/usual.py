"""What is usual: tonight's limit beside the limits of past nights, some of them censored."""

from __future__ import annotations

from dataclasses import dataclass
from enum import StrEnum
from typing import NamedTuple

import numpy as np

from ensemble_horizon.errors import ArgumentError
from ensemble_horizon.horizon.survival import survival
from ensemble_horizon.vocabulary import Status

LEAST_NIGHTS = 10  # below, a tenth of the nights is less than one night
_LOW, _HIGH = 0.1, 0.9
_ROUNDING = 1e-9


class Standing(StrEnum):
    """Where tonight's limit stands: outside the usual range only where that is certain.

    Examples
    --------
    >>> str(Standing.shorter)
    'shorter'
    """

    shorter = "shorter"
    longer = "longer"
    usual = "usual"
    unknown = "unknown"


class NightHorizon(NamedTuple):
    """The horizon of one night.

    Parameters
    ----------
    horizon : float, lead units; read only where the status is ``reached``
    status : Status or its number
    last_lead : float, lead at which the run of that night ends
    """

    horizon: float
    status: int
    last_lead: float


@dataclass(frozen=True)
class Usual:
    """What is usual for a limit, and how tonight compares.

    Parameters
    ----------
    nights : int
        Past nights that it rests on.
    median, low, high : float, lead units
        Quantiles 50, 10 and 90 percent of the past nights. Infinite where the quantile lies among
        nights whose limit was beyond the run; the first lead where it lies among nights that were
        exceeded from the start, and then means "at most"; NaN where there are too few nights.
    percentile : float, 0 to 100
        Of tonight among the past nights, ties counted half; NaN where censoring leaves it open.
    standing : Standing
        ``shorter`` or ``longer`` where tonight is certain to lie outside ``low`` to ``high``;
        ``unknown`` where that cannot be said.
    season : bool
        Whether the past nights are of the same time of year, in other years.
    percentile_bounds : (float, float)
        Between which the percentile lies, both equal to it where it is known.
    without_data : int
        Past nights left out because nothing was known of the limit.
    needed : int
        Nights with data that it takes to call anything usual.

    Examples
    --------
    >>> Usual.unknown(3).standing
    <Standing.unknown: 'unknown'>
    """

    nights: int
    median: float
    low: float
    high: float
    percentile: float
    standing: Standing
    season: bool = False
    percentile_bounds: tuple[float, float] = (float("nan"), float("nan"))
    without_data: int = 0
    needed: int = LEAST_NIGHTS

    @classmethod
    def unknown(
        cls,
        nights: int,
        *,
        season: bool = False,
        without_data: int = 0,
        needed: int = LEAST_NIGHTS,
    ) -> Usual:
        """Too few nights to call anything usual."""
        nan = float("nan")
        return cls(
            nights, nan, nan, nan, nan, Standing.unknown, season, (nan, nan), without_data, needed
        )

    @property
    def edge(self) -> float:
        """The end of the usual range that tonight lies beyond; NaN where it lies beyond none.

        Examples
        --------
        >>> Usual(30, 90.0, 70.0, 110.0, 3.0, Standing.shorter).edge
        70.0
        """
        ends = {Standing.shorter: self.low, Standing.longer: self.high}
        return ends.get(self.standing, float("nan"))

    def within(self, low: float, high: float) -> bool:
        """Whether an interval of tonight's limit holds the edge, so that it may be usual yet.

        Parameters
        ----------
        low, high : float, lead units
            Ends of the interval; NaN where it has none.

        Examples
        --------
        >>> night = Usual(30, 90.0, 70.0, 110.0, 3.0, Standing.shorter)
        >>> night.within(55.0, 80.0), night.within(55.0, 60.0)
        (True, False)
        """
        return low <= self.edge <= high


def usual_of(
    horizon: np.ndarray,
    status: np.ndarray,
    last_lead: np.ndarray,
    *,
    first_lead: float,
    tonight: NightHorizon,
    season: bool = False,
    least: int = LEAST_NIGHTS,
) -> Usual:
    """Median and 10 to 90 percent range of past nights, and tonight's place among them.

    Parameters
    ----------
    horizon : (n,) lead units; read only where the status is ``reached``
    status : (n,) int, see `Status`
    last_lead : (n,) lead at which the run of each night ends
    first_lead : float
        First lead of all these runs.
    tonight : NightHorizon
    season : bool
        Passed on to the result.
    least : int
        Fewer nights with data give ``unknown``.

    Returns
    -------
    Usual

    Raises
    ------
    ArgumentError
        if the arrays differ in length, or a horizon does not lie between the first and last lead.

    Notes
    -----
    ``beyond_run`` and ``no_growth`` are known only to be later than that night's last lead (a
    spread that does not grow meets no limit within the run), ``at_start`` only to be at most the
    first lead. Nights with ``no_data`` are left out and counted.

    With F(t) = 1 - S(t), S the product-limit share of nights still within their limit (Kaplan and
    Meier 1958, Journal of the American Statistical Association), the quantile p is the first t
    with F(t) > p, averaged with the first t with F(t) >= p. Where all runs are equally long, these
    are the order statistics of definition 2 of Hyndman and Fan 1996 (The American Statistician),
    the censored nights being the longest. The percentile of a limit reached at h is 100 times the
    mean of F before and at h; that of a censored night has only bounds.

    Examples
    --------
    >>> past = np.array([30.0, 36, 42, 48, 54, 60, 66, 72, np.nan, np.nan])
    >>> flags = np.where(np.isnan(past), Status.beyond_run, Status.reached)
    >>> found = usual_of(
    ...     past, flags, np.full(10, 96.0), first_lead=0.0, tonight=NightHorizon(24.0, 0, 96.0)
    ... )
    >>> found.low, found.median, found.high, found.percentile, str(found.standing)
    (33.0, 57.0, inf, 0.0, 'shorter')
    """
    time, event, left_out = _waiting(horizon, status, last_lead, first_lead)
    _require_night(tonight, first_lead)
    if time.size < least:
        return Usual.unknown(time.size, season=season, without_data=left_out, needed=least)
    past = _Past.of(time, event, first_lead)
    low, median, high = (past.quantile(share) for share in (_LOW, 0.5, _HIGH))
    bounds = past.percentiles(tonight)
    return Usual(
        nights=time.size,
        median=median,
        low=low,
        high=high,
        percentile=bounds[0] if bounds[0] == bounds[1] else float("nan"),
        standing=_standing(past, low, high, tonight),
        season=season,
        percentile_bounds=bounds,
        without_data=left_out,
        needed=least,
    )


class _Past(NamedTuple):
    """Steps of F: ``share`` of the nights (K,) whose limit is met by ``time`` (K,)."""

    time: np.ndarray
    share: np.ndarray
    first: float
    end: float

    @classmethod
    def of(cls, time: np.ndarray, event: np.ndarray, first: float) -> _Past:
        found = survival(time[:, np.newaxis], event[:, np.newaxis])
        steps, last = np.unique(found.time[::-1, 0], return_index=True)
        share = 1 - found.share[::-1, 0][last]
        return cls(steps, share, first, float(time.max()))

    def quantile(self, share: float) -> float:
        """First time at which more than ``share`` is met, averaged with that of at least it."""
        ends = []
        for level in (share - _ROUNDING, share + _ROUNDING):
            later = np.flatnonzero(self.share > level)
            ends.append(float(self.time[later[0]]) if later.size else float("inf"))
        return sum(ends) / 2

    def met(self, lead: float, *, before: bool = False) -> float:
        """Share met by ``lead``, or before it."""
        side = "left" if before else "right"
        steps = int(np.searchsorted(self.time, lead, side=side))  # type: ignore[call-overload]
        return float(self.share[steps - 1]) if steps else 0.0

    @property
    def whole(self) -> bool:
        """Whether all nights are known to have met their limit by the end."""
        return bool(self.share[-1] > 1 - _ROUNDING)

    def percentiles(self, tonight: NightHorizon) -> tuple[float, float]:
        """Bounds of tonight's percentile, equal where it is known."""
        if tonight.status == Status.no_data:
            return float("nan"), float("nan")
        if tonight.status == Status.at_start:
            return 0.0, _percent(self.met(self.first))
        if tonight.status == Status.reached and (tonight.horizon <= self.end or self.whole):
            here = self.met(tonight.horizon, before=True) + self.met(tonight.horizon)
            return _percent(here / 2), _percent(here / 2)
        lead = tonight.horizon if tonight.status == Status.reached else tonight.last_lead
        return _percent(self.met(lead)), 100.0


def _standing(past: _Past, low: float, high: float, tonight: NightHorizon) -> Standing:
    """Outside the range only where that is certain; None below stands for "cannot be told"."""
    if tonight.status == Status.no_data:
        return Standing.unknown
    if tonight.status == Status.at_start:
        earliest, latest = float("-inf"), past.first
    elif tonight.status == Status.reached:
        earliest = latest = float(tonight.horizon)
    else:
        earliest, latest = float(tonight.last_lead), float("inf")
    shorter, longer = (
        _is_shorter(past, low, earliest, latest),
        _is_longer(past, high, earliest, latest),
    )
    if shorter:
        return Standing.shorter
    if longer:
        return Standing.longer
    return Standing.unknown if shorter is None or longer is None else Standing.usual


def _is_shorter(past: _Past, low: float, earliest: float, latest: float) -> bool | None:
    if low <= past.first:
        return False  # nothing can be told to be shorter than "at most the first lead"
    if np.isinf(low):
        # The low end lies somewhere after the longest past run.
        if latest <= past.end:
            return True
        return False if earliest == past.end else None
    if latest < low:
        return True
    return False if earliest >= low else None


def _is_longer(past: _Past, high: float, earliest: float, latest: float) -> bool | None:
    if np.isinf(high):
        # The high end lies somewhere after the longest past run, and there nothing is compared.
        return False if earliest <= past.end else None
    if latest <= high:
        return False
    certain = earliest > high if earliest == latest else earliest >= high
    return True if certain else None


def _waiting(
    horizon: np.ndarray, status: np.ndarray, last_lead: np.ndarray, first_lead: float
) -> tuple[np.ndarray, np.ndarray, int]:
    """Times (k,) of the nights with data, whether the limit was met then, and nights without."""
    horizon, last = np.asarray(horizon, dtype=float), np.asarray(last_lead, dtype=float)
    flags = np.asarray(status, dtype=int)
    if not horizon.shape == flags.shape == last.shape or horizon.ndim != 1:
        raise ArgumentError(
            "horizon, status, last_lead",
            expected="one value of each for every night",
            found=f"shapes {horizon.shape}, {flags.shape}, {last.shape}",
            remedy="give arrays of the same length",
        )
    for night in zip(horizon.tolist(), flags.tolist(), last.tolist(), strict=True):
        _require_night(NightHorizon(*night), first_lead)
    known = flags != Status.no_data
    reached, at_start = flags == Status.reached, flags == Status.at_start
    time = np.where(reached, horizon, np.where(at_start, first_lead, last))
    return time[known], (reached | at_start)[known], int((~known).sum())


def _require_night(night: NightHorizon, first_lead: float) -> None:
    if night.status == Status.no_data:
        return
    lead = night.horizon if night.status == Status.reached else first_lead
    if not first_lead <= lead <= night.last_lead * (1 + 1e-6) < float("inf"):
        raise ArgumentError(
            "horizon",
            expected=f"reached between the first lead, {first_lead:g}, and the last of that night",
            found=f"{lead:g} in a run that ends at {night.last_lead:g}",
            remedy="give horizons, first lead and last leads in the same units",
        )


def _percent(share: float) -> float:
    """Percent, free of the rounding of the product."""
    return float(np.clip(round(100 * share, 9), 0.0, 100.0))
