"""What a gain says about the wheels: effective track and contact fraction."""

from __future__ import annotations

from dataclasses import dataclass

from calib.intervals import Estimate, ratio_estimate


@dataclass(frozen=True, kw_only=True, slots=True)
class Robot:
    """What turns gains into lengths; None where it is not known."""

    wheel_diameter_mm: float | None = None
    inner_track_mm: float | None = None
    tyre_width_mm: float | None = None


def effective_track_mm(gain: Estimate, robot: Robot, dof: float) -> Estimate | None:
    """Return the diameter of the circle on which the wheels would roll without slip."""
    if robot.wheel_diameter_mm is None:
        return None
    return ratio_estimate(
        robot.wheel_diameter_mm,
        gain.value,
        var_above=0.0,
        var_below=gain.u**2,
        cov=0.0,
        dof=dof,
        confidence=gain.confidence,
    )


def contact_fraction(track_mm: Estimate | None, robot: Robot) -> Estimate | None:
    """Return where the effective track falls across the tyre: 0 at the inner edge, 1 at the outer."""
    if track_mm is None or robot.inner_track_mm is None or robot.tyre_width_mm is None:
        return None
    wide = 2.0 * robot.tyre_width_mm
    return Estimate(
        value=(track_mm.value - robot.inner_track_mm) / wide,
        u=track_mm.u / wide,
        low=(track_mm.low - robot.inner_track_mm) / wide,
        high=(track_mm.high - robot.inner_track_mm) / wide,
        confidence=track_mm.confidence,
    )
