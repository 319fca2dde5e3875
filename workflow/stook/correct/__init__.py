"""Correct: bias correction by quantile mapping."""
