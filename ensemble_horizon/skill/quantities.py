"""What a reduction of scores sums up."""

from __future__ import annotations

CONTROL, CLIMATOLOGY, PERSISTENCE = "control", "climatology", "persistence"

QUANTITIES = (
    "error",  # of the ensemble mean
    "squared_error",
    "variance",  # between members, divisor M - 1
    "expected_squared_error",  # (M + 1)/M of it
    "crps",  # fair
    "outside",  # chance that the analysis lies outside the range of the members
    "outside_expected",  # 2/(M + 1)
    "control_error",
    "control_squared_error",
    "control_crps",  # its absolute error
    "climatology_crps",
    "anomaly",  # analysis minus climatological mean
    "anomaly_squared",
    "product",  # of the anomalies of ensemble mean and analysis
    "forecast_squared",
    "control_product",
    "control_forecast_squared",
    "persistence_squared_error",
    "persistence_crps",  # its absolute error
)
