"""Rounding a value and its uncertainty together."""

from __future__ import annotations

import math

import pytest

from floorswing.numbers import decimals_for, two_digits


@pytest.mark.parametrize(
    ("value", "u", "shown"),
    [
        (10.05762, 0.027, ("10.058", "0.027")),  # JCGM 100:2008, 7.2.6: 10.057 62 ohm, u = 27 mohm: 10.058(27) ohm
        (100.02147, 0.00079, ("100.02147", "0.00079")),  # JCGM 100:2008, 7.2.4: (100.021 47 ± 0.000 79) g
        (90.2138, 0.0997, ("90.21", "0.10")),
        (90.2138, 0.9996, ("90.2", "1.0")),
        (90.2138, 12.3, ("90", "12")),
        (90.2138, 123.4, ("90", "123")),
    ],
)
def test_decimals_follow_the_uncertainty(value: float, u: float, shown: tuple[str, str]):
    decimals = decimals_for(u)
    assert (f"{value:.{decimals}f}", f"{u:.{decimals}f}") == shown


def test_two_digits():
    values = (0.0457, 0.0999, 0.41, 1.0, 12.3, 0.0, math.nan)
    assert [two_digits(value) for value in values] == ["0.046", "0.10", "0.41", "1.0", "12", "0", "?"]
