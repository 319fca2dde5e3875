"""Trend: slopes against randomised trends."""
