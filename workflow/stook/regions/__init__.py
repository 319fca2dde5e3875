"""Regions: area-weighted totals by region and crop."""
