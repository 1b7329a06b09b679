"""Numbers as people read them: with as many decimals as their uncertainty deserves."""

from __future__ import annotations

import math


def decimals_for(u: float) -> int:
    """Return the decimals that show an uncertainty (above 0) with two significant digits.

    The value that it belongs to is printed with the same decimals (JCGM 100:2008, 7.2.6).
    """
    return max(0, 1 - math.floor(math.log10(float(f"{u:.1e}"))))


def two_digits(value: float) -> str:
    """Return a number with two significant digits, or as a whole number, without an exponent."""
    if not math.isfinite(value):
        return "?"
    if value == 0:
        return "0"
    return f"{value:.{decimals_for(abs(value))}f}"
