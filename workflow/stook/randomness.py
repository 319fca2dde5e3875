"""Counter-based random numbers: a value is a function of seed, stream and position, never of order.

The generator is the SplitMix64 finaliser (Steele, Lea & Flood 2014, Fast splittable pseudorandom
number generators, OOPSLA 2014) applied to a chain of 64-bit keys. Whatever the tiles, threads or
region subset, the same position draws the same number.
"""

from __future__ import annotations

import hashlib

import numpy as np
from numba import njit

_GOLDEN = np.uint64(0x9E3779B97F4A7C15)
_MIX_1 = np.uint64(0xBF58476D1CE4E5B9)
_MIX_2 = np.uint64(0x94D049BB133111EB)
_TO_UNIT = 1.0 / 9007199254740992.0  # 2**-53


@njit(cache=True, inline="always")
def mix(key: np.uint64, value: np.uint64) -> np.uint64:
    """Mix one more 64-bit value into a key (scalar kernel)."""
    z = (key ^ value) + _GOLDEN
    z = (z ^ (z >> np.uint64(30))) * _MIX_1
    z = (z ^ (z >> np.uint64(27))) * _MIX_2
    return z ^ (z >> np.uint64(31))


@njit(cache=True, inline="always")
def unit_interval(key: np.uint64) -> float:
    """Return the number in the open interval (0, 1) that belongs to a key (scalar kernel)."""
    return ((key >> np.uint64(11)) + 0.5) * _TO_UNIT


def stream_key(seed: int, *names: str) -> np.uint64:
    """Return the 64-bit key of a named stream of random numbers.

    Parameters
    ----------
    seed
        The assessment's seed.
    names
        What the stream is for, such as ``("trace", "pr", "ALDER-ESM_high_r1")``.
    """
    text = "\x1f".join((str(seed), *names)).encode()
    return np.uint64(int.from_bytes(hashlib.blake2b(text, digest_size=8).digest(), "little"))


def pixel_keys(lat: np.ndarray, lon: np.ndarray) -> np.ndarray:
    """Return a 64-bit key per pixel from its centre, independent of any grid or subset.

    Parameters
    ----------
    lat, lon
        Pixel centres in degrees, any matching shape; longitudes are taken modulo 360 and
        positions are rounded to 1e-5 degree.

    Returns
    -------
    ndarray of uint64
        Same shape.
    """
    row = np.round((np.asarray(lat, dtype=np.float64) + 90.0) * 1e5).astype(np.uint64)
    column = np.round(np.mod(np.asarray(lon, dtype=np.float64), 360.0) * 1e5).astype(np.uint64)
    return (row << np.uint64(32)) | column


def generator(seed: int, *names: str) -> np.random.Generator:
    """Return a NumPy generator for a named stream (for draws that have no position).

    Philox is counter-based (Salmon et al. 2011, SC11); the stream name sets its key.
    """
    return np.random.Generator(np.random.Philox(key=int(stream_key(seed, *names))))
