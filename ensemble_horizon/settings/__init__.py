"""The settings file: TOML read into frozen records."""

from ensemble_horizon.settings.reading import read_settings, settings_from
from ensemble_horizon.settings.tables import Settings

__all__ = ["Settings", "read_settings", "settings_from"]
