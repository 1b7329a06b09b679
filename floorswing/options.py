"""What several commands ask for, read in one way."""

from __future__ import annotations

import math

import click

MOST_ANGLE_DEG = 36_000.0


def angle_of(name: str, text: str) -> float:
    """Return an angle that was typed, in degrees.

    Raises
    ------
    click.UsageError
        If it is not a number other than 0, or beyond a hundred revolutions.
    """
    try:
        value = float(text.strip().replace(",", "."))
    except ValueError:
        raise click.UsageError(f"{name}: found {text!r}; accepted: degrees such as 90 or -45") from None
    if not math.isfinite(value) or value == 0.0 or abs(value) > MOST_ANGLE_DEG:
        raise click.UsageError(f"{name}: found {text}; accepted: degrees other than 0, up to 36000 either way")
    return value
