"""Versions: two versions of a model on the same starts, and whether one holds longer."""

from ensemble_horizon.versions.discovery import false_discovery
from ensemble_horizon.versions.horizons import compare_horizons
from ensemble_horizon.versions.scores import compare_scores
from ensemble_horizon.versions.versions import compare_versions

__all__ = ["compare_horizons", "compare_scores", "compare_versions", "false_discovery"]
