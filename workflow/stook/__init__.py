"""Stook: gridded crop-climate impact projections, auditable at every grid."""

from stook.version import VERSION as __version__

__all__ = ["__version__"]
