"""Ensemble: many members, one statement."""
