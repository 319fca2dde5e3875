"""Constants used by more than one stage, each with its unit and source."""

EARTH_RADIUS_KM = 6371.0
"""Mean radius of the Earth, km (the sphere used for every area; common practice)."""

SECONDS_PER_DAY = 86400.0
"""Seconds in a day."""

TRACE_MM_PER_DAY = 0.05
"""Precipitation below this is dry, mm/day (Cannon, Sobie & Murdock 2015)."""

WET_DAY_MM = 1.0
"""A wet day has at least this much precipitation, mm/day (common practice, no source)."""

TROPICAL_YEAR_DAYS = 365.2425
"""Mean length of the Gregorian year, days."""

OBSERVED = "observed"
"""Name of the pseudo-simulation that is the reference data itself."""

OUTSIDE = "outside all regions"
"""Name of the row that holds what lies outside every region polygon."""

CENTRAL_DRAW = 0
"""Draw number of the central estimate of the response coefficients; draws count from 1."""
