"""Numbers as people read them: a value with its uncertainty, rounded together."""

from __future__ import annotations

import math


def rounded_pair(value: float, u: float, *, sign: bool = False) -> tuple[str, str]:
    """Return a value and its uncertainty with as many decimals as the uncertainty deserves.

    The uncertainty keeps two significant digits and the value is rounded to match (JCGM 100:2008, 7.2.6).
    """
    if not math.isfinite(value):
        return "?", "?"
    plus = "+" if sign else ""
    if not (math.isfinite(u) and u > 0):
        return f"{value:{plus}.4g}", "?" if not math.isfinite(u) else "0"
    decimals = decimals_for(u)
    return f"{value:{plus}.{decimals}f}", f"{u:.{decimals}f}"


def decimals_for(u: float) -> int:
    """Return the decimals that show an uncertainty (above 0) with two significant digits."""
    return max(0, 1 - math.floor(math.log10(float(f"{u:.1e}"))))


def with_uncertainty(value: float, u: float, *, sign: bool = False) -> str:
    """Return `value ± u`, rounded together."""
    shown, uncertain = rounded_pair(value, u, sign=sign)
    return f"{shown} ± {uncertain}"


def two_digits(value: float) -> str:
    """Return a positive number with two significant digits, without an exponent."""
    if not math.isfinite(value):
        return "?"
    if value == 0:
        return "0"
    return f"{value:.{decimals_for(abs(value))}f}"
