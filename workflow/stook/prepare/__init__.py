"""Prepare: raw climate files and crop layers onto the analysis grid."""
