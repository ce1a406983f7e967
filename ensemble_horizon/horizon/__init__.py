"""Horizons: a growth curve and a criterion give a lead-time limit with status and interval."""

from ensemble_horizon.horizon.horizon import horizon, status_names
from ensemble_horizon.horizon.reach import reach
from ensemble_horizon.horizon.waiting import time_to_limit

__all__ = ["horizon", "reach", "status_names", "time_to_limit"]
