"""The plots about the fit: actual against commanded, drift, grain, the place on the tyre."""

from __future__ import annotations

import math
from collections import defaultdict
from collections.abc import Sequence
from typing import TYPE_CHECKING

import numpy as np

from calib.consistency import Check
from calib.fit import Fit
from calib.grain import grain_columns
from calib.intervals import t_quantile
from calib.models import SIDE_NAMES
from floorswing.consistency_report import SEEN_LEVEL
from floorswing.numbers import two_digits
from floorswing.report.gather import Subject
from floorswing.report.marks import Picture, mark, residual_mark, residual_reach_deg, signed_number, turns_of
from floorswing.report.plotting import (
    GREEN,
    GREY,
    HAIR,
    HALF_IN,
    INK,
    PALE,
    SIDE_COLOUR,
    SIDE_MARK,
    drawing,
    pad,
    svg_of,
)

if TYPE_CHECKING:
    from matplotlib.axes import Axes


def relation_picture(subject: Subject) -> Picture | None:
    """Plot actual against commanded with the fit, and below how far each turn is from it."""
    if subject.result is None or not subject.usable:
        return None
    fit, usable = subject.result.fit, subject.usable
    name = f"relation-{subject.letter}"
    with drawing(HALF_IN, 4.0, rows=2, sharex=True, height_ratios=[3, 2]) as (figure, (above, below)):
        _fit_lines(above, below, fit, [turn.turn.commanded_wheel_deg for turn in usable])
        reach = residual_reach_deg(subject)
        below.set_ylim(-reach, reach)
        place = _sideways([turn.turn.commanded_wheel_deg for turn in usable])
        for turn, x in zip(usable, place, strict=True):
            mark(above, turn.turn.commanded_wheel_deg, turn.turn.heading_change_deg, turn)
            ends = turn.along_deg + 2.0 * turn.turn.u_heading_change_deg * np.array([-1.0, 1.0])
            below.plot([x, x], ends, color=GREY, lw=0.7, zorder=1.5, in_layout=False)
            residual_mark(below, x, turn, reach)
        above.set_ylabel("heading change, deg")
        below.set_ylabel("further than fit, deg")
        below.set_xlabel("commanded, wheel degrees")
        pad(below, x=0.03)
        far = max(usable, key=lambda turn: abs(turn.along_deg))
        alt = (
            f"Heading change against commanded wheel degrees for {len(usable)} turns with the fitted line "
            f"({fit.gain().value:.4f} degrees per wheel degree); below, each turn's distance from it, "
            f"{two_digits(abs(far.along_deg))} degrees at most, at turn {far.turn.turn} of {far.clip}."
        )
        svg = svg_of(figure, name, alt)
    return Picture(
        name=name,
        title="Actual against commanded",
        caption=(
            "Line: the fit; dark band: 95 % interval of the mean; light band: where 95 % of single turns land. "
            "Circles counter-clockwise, squares clockwise, crosses not in the fit. Below, turns of one command are "
            "spread sideways in the order driven; bars are each turn's own 95 % uncertainty; a turn beyond the plot "
            "is a triangle at its edge with the number."
        ),
        alt=alt,
        svg=svg,
        shape="tall",
    )


def _fit_lines(above: Axes, below: Axes, fit: Fit, wheel_deg: Sequence[float]) -> None:
    """Draw the fit and its bands over the commands driven, each direction by itself."""
    t = t_quantile(0.95, fit.dof)
    span = max(map(abs, wheel_deg)) * 0.04
    for side in fit.sides:
        sizes = [abs(w) for w in wheel_deg if math.copysign(1.0, w) == side]
        if not sizes:
            continue
        size = np.linspace(max(min(sizes) - span, 1e-6), max(sizes) + span, 40)
        rows = np.outer(size, fit.gain_row(side)) + fit.offset_row(side)
        middle = rows @ fit.coefficients
        u_mean = np.sqrt(np.einsum("ij,jk,ik->i", rows, fit.cov, rows))
        scatter = np.array([fit.scatter_at_deg(float(m)) for m in middle])
        wide = t * np.hypot(u_mean, scatter)
        x = side * size
        above.fill_between(x, side * (middle - wide), side * (middle + wide), color=PALE, lw=0)
        above.plot(x, side * middle, color=INK, lw=0.9)
        below.fill_between(x, -wide, wide, color=PALE, lw=0)
        below.fill_between(x, -t * u_mean, t * u_mean, color=HAIR, lw=0)
        below.plot(x, np.zeros_like(x), color=INK, lw=0.9)


def _sideways(wheel_deg: Sequence[float]) -> list[float]:
    """Return places beside each command, so that repeats do not cover each other, in the order driven."""
    step = max(map(abs, wheel_deg)) * 0.06
    count: dict[float, int] = defaultdict(int)
    total = {w: sum(1 for other in wheel_deg if other == w) for w in wheel_deg}
    places = []
    for w in wheel_deg:
        share = (count[w] + 0.5) / total[w] - 0.5
        places.append(w + 2.0 * step * share * min(1.0, total[w] / 6.0))
        count[w] += 1
    return places


def order_picture(subject: Subject) -> Picture | None:
    """Plot how far each turn is from the fit against the order driven."""
    usable = subject.usable
    if subject.result is None or len(usable) < 3:
        return None
    name = f"order-{subject.letter}"
    with drawing(HALF_IN, 2.2) as (figure, ax):
        reach = _scatter_band(ax, subject)
        for turn in usable:
            residual_mark(ax, turn.order, turn, reach)
        said = _draw_drift(ax, subject)
        ax.set_xlabel("turn, in the order driven")
        ax.set_ylabel("further than fit, deg")
        pad(ax, x=0.02)
        alt = f"Distance from the fit against the order driven, {len(usable)} turns. {said}"
        svg = svg_of(figure, name, alt)
    return Picture(
        name=name,
        title="Against order: drift",
        caption=f"A trend would show wear, warming or a falling battery. {said} Band: 95 % of single turns.",
        alt=alt,
        svg=svg,
    )


def _draw_drift(ax: Axes, subject: Subject) -> str:
    """Draw the trend and say what it is worth; the line is that of a turn of typical size."""
    check, drift = _check(subject, "drift"), subject.consistency.drift if subject.consistency else None
    if drift is None:
        return f"No trend can be told: {check.reason}." if check is not None else ""
    slope = drift.slope_deg
    for clip in range(len(subject.measurements)):
        order = [turn.order for turn in turns_of(subject, clip)]
        if len(order) > 1:
            ends = np.array([order[0], order[-1]], dtype=float)
            ax.plot(ends, slope.value * (ends - ends.mean()), color=GREEN, lw=1.2, ls=(0, (5, 2)))
    p = check.p_adjusted if check else math.nan
    seen = "seen" if p <= SEEN_LEVEL else "not seen"
    value, low, high = (signed_number(part, 3) for part in (slope.value, slope.low, slope.high))
    return (
        f"Dashed: {value} degrees a turn ({low} to {high}, {100.0 * slope.confidence:g} %); a trend is {seen} "
        f"(p = {p:.2g}, adjusted)."
    )


def _check(subject: Subject, name: str) -> Check | None:
    """Return a question asked of the turns, by name."""
    if subject.consistency is None:
        return None
    return next((check for check in subject.consistency.checks if check.name == name), None)


def _scatter_band(ax: Axes, subject: Subject) -> float:
    """Draw the band of single turns and set the limits; return how far the plot reaches."""
    assert subject.result is not None
    fit, reach = subject.result.fit, residual_reach_deg(subject)
    half = t_quantile(0.95, fit.dof) * fit.scatter_deg
    ax.axhspan(-half, half, color=PALE, lw=0)
    ax.axhline(0.0, color=INK, lw=0.8)
    ax.set_ylim(-reach, reach)
    return reach


def start_picture(subject: Subject) -> Picture | None:
    """Plot how far each turn is from the fit against the heading at which it started."""
    usable = subject.usable
    if subject.result is None or len(usable) < 3:
        return None
    name = f"start-{subject.letter}"
    with drawing(HALF_IN, 2.2) as (figure, ax):
        reach = _scatter_band(ax, subject)
        for turn in usable:
            residual_mark(ax, turn.turn.start_heading_deg % 360.0, turn, reach)
        said = _draw_grain(ax, subject)
        ax.set_xlim(-8, 368)
        ax.set_xticks(range(0, 361, 90))
        ax.set_xlabel("heading at the start, deg")
        ax.set_ylabel("further than fit, deg")
        places = {round(turn.turn.start_heading_deg % 360.0 / 15.0) % 24 for turn in usable}
        alt = (
            f"Distance from the fit against the heading at the start, {len(usable)} turns from about {len(places)} "
            f"different headings. {said}"
        )
        svg = svg_of(figure, name, alt)
    return Picture(
        name=name,
        title="Against start heading: grain",
        caption=f"A floor with a grain helps or brakes with two cycles a revolution. {said}",
        alt=alt,
        svg=svg,
    )


def _draw_grain(ax: Axes, subject: Subject) -> str:
    """Draw what the fitted grain does to a turn of typical size, and say what it is worth."""
    check, found = _check(subject, "grain"), subject.consistency.grain if subject.consistency else None
    if found is None or subject.result is None:
        return f"No grain can be told: {check.reason}." if check is not None else ""
    parts = []
    for one in found.frames:
        axis_rad = math.radians(2.0 * one.axis_deg.value)
        pair = one.amplitude.value * np.array([math.cos(axis_rad), math.sin(axis_rad)])
        start_deg = np.linspace(0.0, 360.0, 181)
        for side in subject.result.fit.sides if len(found.frames) == 1 else ():
            extra = side * grain_columns(start_deg, np.full(181, side * subject.result.fit.size_deg)) @ pair
            ax.plot(start_deg, extra, color=SIDE_COLOUR[side], lw=1.0, ls="-" if side > 0 else (0, (4, 2)))
        parts.append(f"{100.0 * one.amplitude.value:.1f} % along {one.axis_deg.value:.0f} degrees")
    seen = "seen" if check is not None and check.p_adjusted <= SEEN_LEVEL else "not seen"
    curves = "Curves: the fitted grain for a turn of typical size, " if len(found.frames) == 1 else "Fitted: "
    p = check.p_adjusted if check else math.nan
    return f"{curves}{', '.join(parts)}; a grain is {seen} (p = {p:.2g}, adjusted)."


def tyre_picture(subject: Subject) -> Picture | None:
    """Draw one tyre to scale with the place where the fitted track says that it acts."""
    from floorswing.fitting import quantities

    result = subject.result
    if result is None or result.robot.inner_track_mm is None or result.robot.tyre_width_mm is None:
        return None
    inner, width = 0.5 * result.robot.inner_track_mm, result.robot.tyre_width_mm
    sides: list[tuple[str, float | None]] = [(SIDE_NAMES[side], side) for side in result.fit.sides]
    sides = sides if result.fit.model.separate_gains else [("both directions", None)]
    name = f"tyre-{subject.letter}"
    with drawing(HALF_IN, 2.2) as (figure, ax):
        ax.fill(
            [inner, inner + width, inner + width, inner],
            [-0.5, -0.5, len(sides) - 0.5, len(sides) - 0.5],
            fc=PALE,
            ec=GREY,
            lw=0.8,
        )
        ax.text(inner + 0.5 * width, -0.62, "tyre, seen from above", ha="center", va="bottom", fontsize=7.0, color=GREY)
        said = []
        for row, (label, side) in enumerate(sides):
            track = quantities(result, side)["effective_track_mm"]
            half, low, high = 0.5 * track["value"], track["low"], track["high"]
            colour = SIDE_COLOUR[side] if side is not None else INK
            if low is not None and high is not None:
                ax.plot([0.5 * low, 0.5 * high], [row, row], color=colour, lw=3.0, solid_capstyle="butt", alpha=0.45)
            ax.plot(
                [half], [row], SIDE_MARK.get(side or 1.0), mfc=colour if side != -1.0 else "white", mec=colour, ms=5
            )
            share = (half - inner) / width
            ax.text(half, row + 0.3, f"{share:.2f} of the width", ha="center", va="center", fontsize=7.0)
            said.append(f"{label} at {half:.2f} millimetres from the middle, {share:.2f} of the width")
        ax.set_yticks(range(len(sides)), [label for label, _ in sides])
        ax.set_ylim(len(sides) - 0.4, -0.95)
        ax.set_xlabel("mm outwards from the robot's middle")
        pad(ax, x=0.15)
        alt = (
            f"A tyre from {inner:g} to {inner + width:g} millimetres from the robot's middle; it acts "
            + "; ".join(said)
            + "."
        )
        svg = svg_of(figure, name, alt)
    return Picture(
        name=name,
        title="Where on the tyre it acts",
        caption="Half the effective track, with its 95 % interval, on a tyre drawn to scale across its width.",
        alt=alt,
        svg=svg,
    )
