"""Ensemble Horizon: how far ahead the runs of an ensemble are worth acting on.

The house, in the order of the story (imports run downward only):

=================  ================================================================================
``cli``            commands: parse, call ``night``, print
``night``          the stages strung together for one set of runs
``settings``       the settings file as frozen records
``products``       datasets in; CF NetCDF, CSV and PNG out
``horizon``        growth curve and criterion give a lead-time limit with status and interval
``growth``         laws of error growth, fits, doubling times, uncertainty
``spread``         spread over members, places, curves, the sampling noise of few members
``runs``           find files, recognise dimensions, survey faults, open lazily
``toys``           toy chaotic systems, and ensembles of them
``checks``         argument checks
``vocabulary``     dimension names, units, attributes, statuses
``errors``         the error tree
=================  ================================================================================
"""

from __future__ import annotations

import gc

# The libraries loaded here make a million objects that all stay: searching them for cycles while
# they load takes a sixth of the time that a command needs to start.
_collecting = gc.isenabled()
gc.disable()

from ensemble_horizon import toys
from ensemble_horizon.errors import (
    ArgumentError,
    EnsembleHorizonError,
    InputError,
    ProductError,
    SettingsError,
)
from ensemble_horizon.growth import doubling_table, fit_growth
from ensemble_horizon.horizon import horizon, reach, status_names
from ensemble_horizon.runs import open_runs, survey_runs
from ensemble_horizon.spread import (
    Region,
    Site,
    area_curve,
    exceedance,
    sampling,
    site_curve,
    spread,
)
from ensemble_horizon.vocabulary import CAUTION, Status

if _collecting:
    gc.enable()

__all__ = [
    "CAUTION",
    "ArgumentError",
    "EnsembleHorizonError",
    "InputError",
    "ProductError",
    "Region",
    "SettingsError",
    "Site",
    "Status",
    "area_curve",
    "doubling_table",
    "exceedance",
    "fit_growth",
    "horizon",
    "open_runs",
    "reach",
    "sampling",
    "site_curve",
    "spread",
    "status_names",
    "survey_runs",
    "toys",
]
