"""Rounding a value and its uncertainty together."""

from __future__ import annotations

import math

import pytest

from floorswing.numbers import rounded_pair, two_digits, with_uncertainty


def test_rounds_as_the_guide_does():
    """Source: JCGM 100:2008, 7.2.6: 10.057 62 ohm with u = 27 mohm is reported as 10.058(27) ohm."""
    assert rounded_pair(10.05762, 0.027) == ("10.058", "0.027")


def test_reports_the_mass_standard_of_the_guide():
    """Source: JCGM 100:2008, 7.2.4: m = (100.021 47 ± 0.000 79) g."""
    assert with_uncertainty(100.02147, 0.00079) == "100.02147 ± 0.00079"


@pytest.mark.parametrize(
    ("value", "u", "shown"),
    [
        (90.2138, 0.0457, "+90.214 ± 0.046"),
        (-90.2138, 0.0997, "-90.21 ± 0.10"),
        (90.2138, 0.9996, "+90.2 ± 1.0"),
        (90.2138, 12.3, "+90 ± 12"),
        (90.2138, 123.4, "+90 ± 123"),
        (90.2138, 0.0, "+90.21 ± 0"),
        (90.2138, math.nan, "+90.21 ± ?"),
        (math.nan, 0.1, "? ± ?"),
    ],
)
def test_pairs(value: float, u: float, shown: str):
    assert with_uncertainty(value, u, sign=True) == shown


def test_two_digits():
    assert [two_digits(x) for x in (0.0457, 0.0999, 0.41, 1.0, 12.3, 0.0, math.nan)] == [
        "0.046",
        "0.10",
        "0.41",
        "1.0",
        "12",
        "0",
        "?",
    ]
