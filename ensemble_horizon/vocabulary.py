"""Names, units and attribute tables shared by every stage.

Dimension names follow the forecasting trade; standard names, axis and unit spellings follow the
CF conventions (CF-1.11, section 4 and appendix of standard names).
"""

from __future__ import annotations

from enum import IntEnum

START = "start"
LEAD = "lead"
MEMBER = "member"
VALID = "valid"
LATITUDE = "latitude"
LONGITUDE = "longitude"
CELL = "cell"
PLACE = "place"
CRITERION = "criterion"
SCORE = "score"
LIMIT = "limit"
RANK = "rank"

CONVENTIONS = "CF-1.11"

CAUTION = (
    "A horizon is a statement about a model, not a warning and no licence to sail, fly or build. "
    "Decisions that touch safety go by official warnings, local rules and the qualified forecaster "
    "on duty."
)


class Status(IntEnum):
    """What a horizon is: a number only where it is ``reached``.

    Examples
    --------
    >>> Status.beyond_run.name, int(Status.beyond_run)
    ('beyond_run', 1)
    """

    reached = 0
    beyond_run = 1
    at_start = 2
    no_growth = 3
    no_data = 4


STATUS_MEANING = {
    Status.reached: "the threshold is reached within the run",
    Status.beyond_run: "not reached by the last lead (censored)",
    Status.at_start: "reached at the first lead",
    Status.no_growth: "the spread does not grow, so there is no limit to state",
    Status.no_data: "too little data, or the criterion rests on what is not known",
}

STATUS_ATTRIBUTES = {
    "long_name": "status of the horizon",
    "flag_values": [int(status) for status in Status],
    "flag_meanings": " ".join(status.name for status in Status),
}

# Standard names by canonical dimension, the most telling first.
STANDARD_NAMES = {
    START: ("forecast_reference_time",),
    LEAD: ("forecast_period",),
    MEMBER: ("realization",),
    VALID: ("time",),
    LATITUDE: ("latitude",),
    LONGITUDE: ("longitude",),
}

COORDINATE_ATTRIBUTES: dict[str, dict[str, str]] = {
    START: {"standard_name": "forecast_reference_time", "long_name": "start of the forecast"},
    LEAD: {"standard_name": "forecast_period", "long_name": "lead time"},
    MEMBER: {"standard_name": "realization", "long_name": "ensemble member"},
    VALID: {"standard_name": "time", "long_name": "valid time"},
    LATITUDE: {"standard_name": "latitude", "units": "degrees_north"},
    LONGITUDE: {"standard_name": "longitude", "units": "degrees_east"},
}

HOURS = "hours"
