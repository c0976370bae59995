"""Radiation quality and biology: relative effectiveness, oxygen, dose-volume measures, agreement of maps."""
