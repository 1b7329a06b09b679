"""The columns of the tables that `measure` writes, in their order, with the decimals each is printed with.

A decimal is kept where a tenth of the smallest uncertainty seen in practice would still show: ten
microseconds, a ten-thousandth of a degree, a micrometre.
"""

from __future__ import annotations

TURN_DECIMALS: dict[str, int | None] = {
    "turn": None,
    "start_s": 5,
    "end_s": 5,
    "commanded_wheel_deg": None,
    "heading_change_deg": 5,
    "u_heading_change_deg": 5,
    "start_heading_deg": 5,
    "end_heading_deg": 5,
    "peak_rate_deg_s": 3,
    "overshoot_deg": 4,
    "settle_s": 4,
    "centre_x_mm": 3,
    "centre_y_mm": 3,
    "wander_mm": 3,
    "flags": None,
}
TURN_COLUMNS = tuple(TURN_DECIMALS)
"""The columns of ``turns.csv``; factors follow them and may not share a name with them."""

EVENT_COLUMNS = ("start_s", "end_s", "kind", "detail")
"""The columns of ``events.csv``."""

HEADING_DECIMALS: dict[str, int] = {
    "time_s": 5,
    "heading_deg": 5,
    "u_heading_deg": 5,
    "x_mm": 3,
    "y_mm": 3,
    "scale": 6,
    "residual_px": 4,
}
HEADING_COLUMNS = (*HEADING_DECIMALS, "state")
"""The columns of ``heading.csv``."""
