"""Ensemble Horizon: how far ahead the runs of an ensemble are worth acting on.

The house, in the order of the story (imports run downward only):

=================  ================================================================================
``cli``            commands: parse, call ``night``, print
``night``          the stages strung together for one set of runs
``settings``       the settings file as frozen records
``products``       datasets in; CF NetCDF, CSV and PNG out
``versions``       two versions on the same starts: hours gained, differences of scores
``horizon``        growth curve and criterion give a lead-time limit with status and interval
``growth``         laws of error growth, fits, doubling times, uncertainty
``skill``          forecasts held against analyses: scores, ranks, calibration of the spread
``spread``         spread over members, places, curves, the sampling noise of few members
``serial``         starts that depend on one another: means, intervals, resamples
``runs``           find files, recognise dimensions, survey faults, open lazily
``toys``           toy chaotic systems, ensembles of them, twin experiments
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
from ensemble_horizon.horizon import horizon, reach, status_names, time_to_limit
from ensemble_horizon.horizon.skill_limits import skill_limits
from ensemble_horizon.runs import open_runs, survey_runs
from ensemble_horizon.skill import (
    anomaly_correlation,
    anomaly_products,
    apply_calibration,
    bias,
    calibration_factor,
    calibration_on_grid,
    climatology_crps,
    crps,
    outside_share,
    persistence,
    rank_counts,
    rank_flatness,
    rmse,
    score_interval,
    skill_score,
    spread_and_error,
    spread_error_ratio,
)
from ensemble_horizon.spread import (
    Region,
    Site,
    area_curve,
    exceedance,
    position_spread,
    sampling,
    site_curve,
    spread,
)
from ensemble_horizon.versions import (
    compare_horizons,
    compare_scores,
    compare_versions,
    false_discovery,
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
    "anomaly_correlation",
    "anomaly_products",
    "apply_calibration",
    "area_curve",
    "bias",
    "calibration_factor",
    "calibration_on_grid",
    "climatology_crps",
    "compare_horizons",
    "compare_scores",
    "compare_versions",
    "crps",
    "doubling_table",
    "exceedance",
    "false_discovery",
    "fit_growth",
    "horizon",
    "open_runs",
    "outside_share",
    "persistence",
    "position_spread",
    "rank_counts",
    "rank_flatness",
    "reach",
    "rmse",
    "sampling",
    "score_interval",
    "site_curve",
    "skill_limits",
    "skill_score",
    "spread",
    "spread_and_error",
    "spread_error_ratio",
    "status_names",
    "survey_runs",
    "time_to_limit",
    "toys",
]
