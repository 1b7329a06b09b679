"""The plots of one clip: heading against time, path and spin centres, uncertainty budget."""

from __future__ import annotations

import math
from collections.abc import Sequence
from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import ArrayLike

from floorswing.numbers import two_digits
from floorswing.records import Measurement
from floorswing.report.gather import Seen, Subject
from floorswing.report.marks import Picture, plain_letters, turns_of
from floorswing.report.plotting import (
    BLUE,
    GREY,
    HAIR,
    HALF_IN,
    INK,
    ORANGE,
    PALE,
    SIDE_COLOUR,
    SIDE_MARK,
    WIDE_IN,
    drawing,
    pad,
    svg_of,
)

if TYPE_CHECKING:
    from matplotlib.axes import Axes


ROW_S = 45.0
"""Time in one row of the plot of headings."""


EVENT_HATCH = {"handled": "///", "driven": "\\\\\\", "hidden": "xxx"}


def heading_picture(subject: Subject, number: int) -> Picture | None:
    """Plot heading against time for one clip, in rows, with its turns, rests and events."""
    one = subject.measurements[number]
    track = one.track
    if track is None or not np.isfinite(track.heading_deg).any():
        return None
    end_s = float(track.time_s[-1])
    n_rows = max(1, math.ceil((end_s - 2.0) / ROW_S))
    row_s = end_s / n_rows
    seen = turns_of(subject, number)
    name = f"heading-{subject.letter}{number + 1}"
    with drawing(WIDE_IN, 0.55 + 1.35 * n_rows, rows=n_rows, sharey=True, squeeze=False) as (figure, axes):
        for row, ax in enumerate(axes[:, 0]):
            start_s = row * row_s
            _heading_row(ax, one, seen, start_s, start_s + row_s)
        axes[-1, 0].set_xlabel("time, s")
        figure.supylabel("heading, deg", fontsize=8.0)
        alt = _heading_alt(one, seen)
        svg = svg_of(figure, name, alt)
    return Picture(
        name=name,
        title="Heading against time",
        caption="Shaded: turns, with their numbers. Bold: at rest. Hatched: what was not a turn.",
        alt=alt,
        svg=svg,
        shape="wide",
    )


def _heading_row(ax: Axes, one: Measurement, seen: Sequence[Seen], start_s: float, end_s: float) -> None:
    track = one.track
    assert track is not None
    over = ax.get_xaxis_transform()
    for k, turn in enumerate(seen):
        if turn.turn.end_s < start_s or turn.turn.start_s > end_s:
            continue
        middle_s = 0.5 * (max(turn.turn.start_s, start_s) + min(turn.turn.end_s, end_s))
        ax.axvspan(
            turn.turn.start_s, turn.turn.end_s, color=PALE, lw=0, gid=f"turn-{turn.key}-n{2 * k}", in_layout=False
        )
        ax.text(
            middle_s, 1.0, str(turn.turn.turn), transform=over, ha="center", va="bottom", fontsize=7.0,
            gid=f"turn-{turn.key}-n{2 * k + 1}",
        )  # fmt: skip
    for n, event in enumerate(one.events):
        if event.end_s >= start_s and event.start_s <= end_s:
            top = 0.06 if event.kind == "camera moved" else 1.0  # it can last the whole clip
            ax.axvspan(
                event.start_s, max(event.end_s, event.start_s + 0.15), ymax=top, facecolor="none", edgecolor=ORANGE,
                lw=0.4, hatch=EVENT_HATCH.get(event.kind, "..."),
            )  # fmt: skip
            low = 0.08 + 0.09 * (n % 3)
            ax.text(max(event.start_s, start_s), low, f" {plain_letters(event.kind)}", transform=over, fontsize=6.5)
    inside = (track.time_s >= start_s) & (track.time_s <= end_s)
    still = np.array([state == "rest" for state in track.state])
    ax.plot(track.time_s[inside], track.heading_deg[inside], color=GREY, lw=0.8)
    ax.plot(track.time_s[inside], np.where(still, track.heading_deg, np.nan)[inside], color=INK, lw=1.8)
    ax.set_xlim(start_s, end_s)
    pad(ax, y=0.06)


def _heading_alt(one: Measurement, seen: Sequence[Seen]) -> str:
    assert one.track is not None
    heading_deg = one.track.heading_deg
    low, high = float(np.nanmin(heading_deg)), float(np.nanmax(heading_deg))
    return (
        f"Heading against time over {one.track.time_s[-1]:.0f} seconds: {len(seen)} turns between rests, heading "
        f"between {low:.0f} and {high:.0f} degrees, {len(one.events)} stretches that were not turns."
    )


def path_picture(subject: Subject, number: int) -> Picture | None:
    """Plot the path of the robot on the floor to scale, and its spin centres enlarged."""
    one = subject.measurements[number]
    seen = turns_of(subject, number)
    centres = [turn for turn in seen if math.isfinite(turn.turn.centre_x_mm)]
    track = one.track
    if track is None or not centres:
        return None
    name = f"path-{subject.letter}{number + 1}"
    known = np.isfinite(track.x_mm)
    with drawing(WIDE_IN, 3.5, columns=2) as (figure, (whole, close)):
        whole.plot(track.x_mm, track.y_mm, color=HAIR, lw=0.8)
        _same_scale(whole, track.x_mm[known], track.y_mm[known], margin=0.14, least_mm=2.0)
        _same_scale(close, [one.turn.centre_x_mm for one in centres], [one.turn.centre_y_mm for one in centres])
        _heading_ticks(whole, one, seen)
        for turn in centres:
            whole.plot([turn.turn.centre_x_mm], [turn.turn.centre_y_mm], "+", color=INK, ms=5, mew=0.8)
            _mark_by_heading(close, turn)
        for ax in (whole, close):
            ax.set_xlabel("x, mm")
            ax.set_ylabel("y, mm")
        whole.set_title("path and headings at rest", fontsize=8.0, loc="left")
        close.set_title("spin centres", fontsize=8.0, loc="left")
        spread = [float(np.ptp([getattr(turn.turn, f"centre_{axis}_mm") for turn in centres])) for axis in "xy"]
        alt = (
            f"Left, the path of the robot seen from above; right, {len(centres)} spin centres, spread over "
            f"{two_digits(spread[0])} by {two_digits(spread[1])} millimetres."
        )
        svg = svg_of(figure, name, alt)
    return Picture(
        name=name,
        title="On the floor, to scale",
        caption=(
            "Left: where the middle between the two markers went, with the heading at each rest; crosses: spin "
            "centres. Right: the spin centres enlarged, numbered by turn. Both axes of a plot have one scale."
        ),
        alt=alt,
        svg=svg,
        shape="wide",
    )


def _same_scale(ax: Axes, x: ArrayLike, y: ArrayLike, margin: float = 0.1, least_mm: float = 0.1) -> None:
    """Give both axes the same span about the middle of the points, so that lengths can be compared."""
    x_mm, y_mm = np.asarray(x, dtype=float), np.asarray(y, dtype=float)
    half = (0.5 + margin) * max(float(np.ptp(x_mm)), float(np.ptp(y_mm)), least_mm)
    for put, values in ((ax.set_xlim, x_mm), (ax.set_ylim, y_mm)):
        middle = 0.5 * float(values.min() + values.max())
        put(middle - half, middle + half)
    ax.set_aspect("equal", adjustable="box")


def _heading_ticks(ax: Axes, one: Measurement, seen: Sequence[Seen]) -> None:
    """Draw a short line along the heading at the end of each turn."""
    track = one.track
    assert track is not None
    length = 0.12 * float(np.diff(ax.get_xlim())[0])
    for turn in seen:
        k = int(np.argmin(np.abs(track.time_s - turn.turn.end_s)))
        angle, x, y = math.radians(turn.turn.end_heading_deg), float(track.x_mm[k]), float(track.y_mm[k])
        if math.isfinite(x + angle):
            side = 1.0 if turn.turn.heading_change_deg >= 0 else -1.0
            ends = [x, x + length * math.cos(angle)], [y, y + length * math.sin(angle)]
            ax.plot(*ends, color=SIDE_COLOUR[side], lw=0.8, ls="-" if side > 0 else (0, (3, 1.2)), in_layout=False)
            ax.plot([x], [y], ".", color=SIDE_COLOUR[side], ms=4, gid=f"turn-{turn.key}", in_layout=False)


def _mark_by_heading(ax: Axes, turn: Seen) -> None:
    side = 1.0 if turn.turn.heading_change_deg >= 0 else -1.0
    x, y, colour = turn.turn.centre_x_mm, turn.turn.centre_y_mm, SIDE_COLOUR[side]
    fill = colour if side > 0 else "white"
    ax.plot([x], [y], SIDE_MARK[side], mfc=fill, mec=colour, mew=1.0, ms=4.0, gid=f"turn-{turn.key}", in_layout=False)
    number = ax.annotate(str(turn.turn.turn), (x, y), (3, 3), textcoords="offset points", fontsize=6.0, color=GREY)
    number.set_in_layout(False)


def budget_picture(subject: Subject, number: int) -> Picture | None:
    """Plot the uncertainty budget of a heading change beside the scatter of the robot."""
    one = subject.measurements[number]
    lines = sorted((line for line in one.budget if math.isfinite(line.u_deg)), key=lambda line: -line.u_deg)
    if not lines:
        return None
    total = math.sqrt(math.fsum(line.u_deg**2 for line in lines))
    name = f"budget-{subject.letter}{number + 1}"
    with drawing(HALF_IN, 0.75 + 0.24 * (len(lines) + 1)) as (figure, ax):
        labels = [*(plain_letters(line.name, 60) for line in lines), "together"]
        values = [*(line.u_deg for line in lines), total]
        ax.barh(range(len(values)), values, height=0.55, color=[*[HAIR] * len(lines), BLUE])
        for row, value in enumerate(values):
            ax.text(value, row, f" {value:.4f}", va="center", fontsize=7.0)
        ax.set_yticks(range(len(labels)), [_broken(label) for label in labels])
        ax.invert_yaxis()
        ax.set_xlim(0.0, max(values) * 1.35 or 1.0)
        ax.set_xlabel("standard uncertainty, deg")
        alt = (
            f"Uncertainty budget in degrees: {', '.join(f'{a} {v:.4f}' for a, v in zip(labels, values, strict=True))}."
        )
        svg = svg_of(figure, name, alt)
    beside = ""
    if subject.result is not None and subject.result.fit.scatter_deg > 0:
        times = subject.result.fit.scatter_deg / total if total else math.inf
        beside = f" The robot's own scatter is {two_digits(times)} times as large." if times >= 1 else (
            f" It is {two_digits(1 / times)} times the robot's own scatter: better pictures would tell more."
        )  # fmt: skip
    return Picture(
        name=name,
        title="Uncertainty of one reading",
        caption=f"Contributions to a typical heading change as measured (JCGM 100), added in squares.{beside}",
        alt=alt,
        svg=svg,
    )


def _broken(label: str, most: int = 24) -> str:
    """Return a label on up to three lines."""
    lines = [""]
    for word in label.split():
        if lines[-1] and len(lines[-1]) + len(word) >= most:
            lines.append("")
        lines[-1] = f"{lines[-1]} {word}".strip()
    return "\n".join(lines[:3])
