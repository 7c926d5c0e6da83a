"""Schedules: alarms and trips, cause and effect, tuning, failure effects, channels, instruments."""
