"""The plain path: each stage for one pixel, for reading; no code shared with the kernels."""
