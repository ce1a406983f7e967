"""Twin experiments: a model forecasts a truth that another run of a model has made.

In reading order: `displacement` (how states are displaced, and what of the past that takes),
`experiment` (the record of a whole experiment), `truth` (the run that counts as the truth),
`forecasts` (analyses, members, their runs), `places` (which fields are kept, and where).
Nothing here touches a file.
"""

from ensemble_horizon.toys.twin.displacement import Displacement
from ensemble_horizon.toys.twin.experiment import ModelVersion, TwinExperiment
from ensemble_horizon.toys.twin.forecasts import (
    Block,
    analysis_at,
    initial_members,
    run_forecast,
)
from ensemble_horizon.toys.twin.places import FieldPlan
from ensemble_horizon.toys.twin.truth import Moment, follow_truth, moment_of_start

__all__ = [
    "Block",
    "Displacement",
    "FieldPlan",
    "ModelVersion",
    "Moment",
    "TwinExperiment",
    "analysis_at",
    "follow_truth",
    "initial_members",
    "moment_of_start",
    "run_forecast",
]
