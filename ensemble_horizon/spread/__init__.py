"""Spread over members: moments, places, curves, and the sampling noise of few members."""

from ensemble_horizon.spread.curves import area_curve, site_curve
from ensemble_horizon.spread.places import Region, Site
from ensemble_horizon.spread.positions import position_spread
from ensemble_horizon.spread.sampling import sampling
from ensemble_horizon.spread.spread import exceedance, spread

__all__ = [
    "Region",
    "Site",
    "area_curve",
    "exceedance",
    "position_spread",
    "sampling",
    "site_curve",
    "spread",
]
