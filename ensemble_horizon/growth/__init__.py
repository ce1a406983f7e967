"""Laws of error growth: fits, doubling times, uncertainty.

growth        fit_growth: labelled curves in, labelled fits out
doubling      doubling times against error size, from a law and from a curve alone
fitted        curves and times by the laws that a fit chose
uncertainty   how parameters and times answer to the curve (delta method)
selection     choice between the laws
akaike        the criterion of that choice
fitting       one law, many curves: batches, covariance, reasons
descent       the damped Gauss-Newton iteration
laws          the registry of the laws
exponential, logistic, source, power    one law each
starts        first guesses
law           what a law is
clock         lead times, and exponentials over them
units         units of what a fit yields
"""

from __future__ import annotations

from ensemble_horizon.growth.akaike import corrected_akaike
from ensemble_horizon.growth.doubling import crossing_times, doubling_table, finite_size_rates
from ensemble_horizon.growth.fitted import doubling_at, fitted_curve, fitted_time_to
from ensemble_horizon.growth.fitting import Fit, Reason, fit_curves
from ensemble_horizon.growth.growth import fit_growth, growth_table
from ensemble_horizon.growth.law import Law
from ensemble_horizon.growth.laws import LAWS, find_law
from ensemble_horizon.growth.selection import Selection, select_law
from ensemble_horizon.growth.uncertainty import (
    delta_covariance,
    doubling_error,
    growth_rate_error,
    parameter_sensitivity,
    time_gradient,
)

__all__ = [
    "LAWS",
    "Fit",
    "Law",
    "Reason",
    "Selection",
    "corrected_akaike",
    "crossing_times",
    "delta_covariance",
    "doubling_at",
    "doubling_error",
    "doubling_table",
    "find_law",
    "finite_size_rates",
    "fit_curves",
    "fit_growth",
    "fitted_curve",
    "fitted_time_to",
    "growth_rate_error",
    "growth_table",
    "parameter_sensitivity",
    "select_law",
    "time_gradient",
]
