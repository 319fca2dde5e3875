"""Stook: gridded crop-climate impact projections, auditable at every grid."""

from stook.version import VERSION as __version__  # noqa: N811 (the usual name of a version)

__all__ = ["__version__"]
