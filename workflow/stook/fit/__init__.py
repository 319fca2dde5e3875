"""Fit: estimate a yield response from a yield panel and the observed season indices."""
