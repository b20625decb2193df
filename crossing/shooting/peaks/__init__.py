"""Forecast of peak magnifications, their rates and durations."""
