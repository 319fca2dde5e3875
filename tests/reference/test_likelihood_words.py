"""The likelihood scale against its published table, every cut point.

Mastrandrea et al. (2010), Guidance note for lead authors of the IPCC fifth assessment report on
consistent treatment of uncertainties, table 1: virtually certain 99-100 %; very likely 90-100 %;
likely 66-100 %; about as likely as not 33-66 %; unlikely 0-33 %; very unlikely 0-10 %;
exceptionally unlikely 0-1 %; and, below the table, extremely likely 95-100 %, more likely than not
over 50-100 %, extremely unlikely 0-5 %.
"""

from __future__ import annotations

import math

import pytest
from stook.audit.plain.ensemble import word
from stook.ensemble.likelihood import direction, likelihood_word

RANGES = {
    "virtually certain": (99, 100),
    "extremely likely": (95, 100),
    "very likely": (90, 100),
    "likely": (66, 100),
    "more likely than not": (50.0000001, 100),
    "about as likely as not": (33, 66),
    "unlikely": (0, 33),
    "very unlikely": (0, 10),
    "extremely unlikely": (0, 5),
    "exceptionally unlikely": (0, 1),
}
CASES = [
    (1.0, "virtually certain"),
    (0.99, "virtually certain"),
    (0.9899, "extremely likely"),
    (0.95, "extremely likely"),
    (0.9499, "very likely"),
    (0.90, "very likely"),
    (0.8999, "likely"),
    (0.66, "likely"),
    (0.6599, "more likely than not"),
    (0.5001, "more likely than not"),
    (0.5, "about as likely as not"),
    (0.33, "about as likely as not"),
    (0.3299, "unlikely"),
    (0.1001, "unlikely"),
    (0.10, "very unlikely"),
    (0.0501, "very unlikely"),
    (0.05, "extremely unlikely"),
    (0.0101, "extremely unlikely"),
    (0.01, "exceptionally unlikely"),
    (0.0, "exceptionally unlikely"),
]


@pytest.mark.parametrize(("share", "expected"), CASES)
def test_every_cut_point(share: float, expected: str) -> None:
    assert likelihood_word(share) == expected


def test_word_holds_its_share_and_no_range_inside_it_does() -> None:
    for step in range(0, 100001, 7):
        share = step / 100000
        percent = round(100 * share, 9)
        chosen = str(likelihood_word(share))
        low, high = RANGES[chosen]
        assert low <= percent <= high
        for name, (a, b) in RANGES.items():
            inside = low <= a and b <= high and name != chosen
            assert not (inside and a <= percent <= b)
        assert word(share) == chosen


def test_sums_of_weights_reach_a_cut_point() -> None:
    share = sum([0.66 / 18] * 18)
    assert share < 0.66
    assert likelihood_word(share) == "likely"
    assert likelihood_word(1 - 1e-15) == "virtually certain"


def test_direction_and_missing() -> None:
    assert direction(0.5) == ("about as likely as not", "decrease")
    assert direction(0.49) == ("more likely than not", "increase")
    assert direction(0.0) == ("virtually certain", "increase")
    assert direction(math.nan) == (None, None)
    assert likelihood_word(math.nan) is None
