"""Grids: CF files, units, calendars, cells, regridding, overlay."""
