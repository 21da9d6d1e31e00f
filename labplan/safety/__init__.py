"""Hazards: pure functions on values, from the packaged tables."""
