"""Skill: forecasts held against analyses, and the spread against the error."""

from ensemble_horizon.skill.anomaly import anomaly_correlation, anomaly_products
from ensemble_horizon.skill.calibration import apply_calibration, calibration_factor
from ensemble_horizon.skill.consistency import spread_and_error, spread_error_ratio
from ensemble_horizon.skill.crps import crps
from ensemble_horizon.skill.departures import bias, rmse
from ensemble_horizon.skill.flatness import rank_flatness
from ensemble_horizon.skill.gridding import calibration_on_grid
from ensemble_horizon.skill.interval import score_interval
from ensemble_horizon.skill.ranks import outside_share, rank_counts
from ensemble_horizon.skill.references import climatology_crps, persistence, skill_score

__all__ = [
    "anomaly_correlation",
    "anomaly_products",
    "apply_calibration",
    "bias",
    "calibration_factor",
    "calibration_on_grid",
    "climatology_crps",
    "crps",
    "outside_share",
    "persistence",
    "rank_counts",
    "rank_flatness",
    "rmse",
    "score_interval",
    "skill_score",
    "spread_and_error",
    "spread_error_ratio",
]
