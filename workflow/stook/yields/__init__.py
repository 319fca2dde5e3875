"""Yields: empirical yield response, pixel by pixel."""
