"""Runs: find the files, recognise their dimensions, survey faults, open in the canonical layout."""

from ensemble_horizon.runs.assembly import read_catalogue
from ensemble_horizon.runs.catalogue import Catalogue
from ensemble_horizon.runs.faults import Fault
from ensemble_horizon.runs.fields import open_field
from ensemble_horizon.runs.grids import Grid
from ensemble_horizon.runs.handles import close_files
from ensemble_horizon.runs.opening import open_analyses, open_runs, to_dataset
from ensemble_horizon.runs.report import SurveyReport
from ensemble_horizon.runs.survey import survey_runs
from ensemble_horizon.runs.units import converter, difference_scale

__all__ = [
    "Catalogue",
    "Fault",
    "Grid",
    "SurveyReport",
    "close_files",
    "converter",
    "difference_scale",
    "open_analyses",
    "open_field",
    "open_runs",
    "read_catalogue",
    "survey_runs",
    "to_dataset",
]
