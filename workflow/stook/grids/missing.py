"""Reason codes: why a pixel has no value. A missing value anywhere in the results carries one."""

from __future__ import annotations

from enum import IntEnum


class Reason(IntEnum):
    """Reason of a missing value; 0 means the value is there."""

    VALID = 0
    OUTSIDE_CROP_AREA = 1
    OUTSIDE_REQUESTED_REGION = 2
    MISSING_INPUT = 3
    TOO_FEW_VALUES = 4
    INCOMPLETE_SEASON = 5
    NO_CALENDAR = 6
    NO_BASELINE_YIELD = 7
    BASELINE_NOT_POSITIVE = 8


def reason_attributes() -> dict[str, object]:
    """Return the CF attributes of a variable of reason codes (CF 1.11, section 3.5)."""
    import numpy as np

    return {
        "long_name": "reason why values are missing",
        "flag_values": np.array([int(reason) for reason in Reason], dtype=np.int8),
        "flag_meanings": " ".join(reason.name.lower() for reason in Reason),
    }
