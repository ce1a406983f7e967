"""Ensemble Horizon."""
