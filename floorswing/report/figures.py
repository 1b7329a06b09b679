"""The plots of one subject. Each function returns a picture with its caption and its text alternative."""

from __future__ import annotations

import math
from collections import defaultdict
from collections.abc import Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import ArrayLike

from calib.consistency import Check
from calib.fit import Fit
from calib.grain import grain_columns
from calib.intervals import t_quantile
from calib.models import SIDE_NAMES
from calib.tolerance import tolerance_factor
from floorswing.consistency_report import SEEN_LEVEL
from floorswing.numbers import two_digits
from floorswing.records import Measurement
from floorswing.report.gather import USUAL_DEG, Seen, Subject
from floorswing.report.plotting import (
    BLUE,
    GREEN,
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
NEAR_DEG = 6.0
"""A command aims at a usual angle if the fit puts it this near."""
EVENT_HATCH = {"handled": "///", "driven": "\\\\\\", "hidden": "xxx"}


@dataclass(frozen=True, kw_only=True, slots=True)
class Picture:
    """A plot for the page.

    Parameters
    ----------
    name : str
        For links.
    title, caption, alt : str
        Alt says in words what the plot shows.
    svg : str
    shape : str
        ``wide`` for the page's width, ``tall`` for two beside it, empty for one beside another.
    """

    name: str
    title: str
    caption: str
    alt: str
    svg: str
    shape: str = ""


def heading_picture(subject: Subject, number: int) -> Picture | None:
    """Plot heading against time for one clip, in rows, with its turns, rests and events."""
    one = subject.measurements[number]
    track = one.track
    if track is None or not np.isfinite(track.heading_deg).any():
        return None
    end_s = float(track.time_s[-1])
    n_rows = max(1, math.ceil((end_s - 2.0) / ROW_S))
    row_s = end_s / n_rows
    seen = [turn for turn in subject.seen if turn.key.startswith(f"{subject.letter}{number + 1}-")]
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
            ax.text(max(event.start_s, start_s), low, f" {_plain(event.kind)}", transform=over, fontsize=6.5)
    inside = (track.time_s >= start_s) & (track.time_s <= end_s)
    still = np.array([state == "rest" for state in track.state])
    ax.plot(track.time_s[inside], track.heading_deg[inside], color=GREY, lw=0.8)
    ax.plot(track.time_s[inside], np.where(still, track.heading_deg, np.nan)[inside], color=INK, lw=1.8)
    ax.set_xlim(start_s, end_s)
    pad(ax, y=0.06)


def _plain(text: str, most: int = 16) -> str:
    """Return the letters of a text that the plots' font has for certain."""
    return "".join(c if c.isascii() and c.isprintable() else "?" for c in text)[:most]


def _heading_alt(one: Measurement, seen: Sequence[Seen]) -> str:
    assert one.track is not None
    heading_deg = one.track.heading_deg
    low, high = float(np.nanmin(heading_deg)), float(np.nanmax(heading_deg))
    return (
        f"Heading against time over {one.track.time_s[-1]:.0f} seconds: {len(seen)} turns between rests, heading "
        f"between {low:.0f} and {high:.0f} degrees, {len(one.events)} stretches that were not turns."
    )


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
            _mark(above, turn.turn.commanded_wheel_deg, turn.turn.heading_change_deg, turn)
            ends = turn.along_deg + 2.0 * turn.turn.u_heading_change_deg * np.array([-1.0, 1.0])
            below.plot([x, x], ends, color=GREY, lw=0.7, zorder=1.5, in_layout=False)
            _residual(below, x, turn, reach)
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


def residual_reach_deg(subject: Subject) -> float:
    """Return how far a plot of distances from the fit reaches: the turns in the fit and their band, not the strays."""
    assert subject.result is not None
    fit = subject.result.fit
    kept = [abs(turn.along_deg) for turn in subject.usable if not turn.is_stray]
    return 1.15 * max([*kept, t_quantile(0.95, fit.dof) * fit.scatter_deg, 1e-3])


def _residual(ax: Axes, x: float, turn: Seen, reach: float) -> None:
    """Draw a turn at its distance from the fit; one beyond the plot at its edge, with the number."""
    y = turn.along_deg
    if abs(y) <= reach:
        _mark(ax, x, y, turn)
        return
    edge = math.copysign(0.95 * reach, y)
    ax.plot([x], [edge], "^" if y > 0 else "v", color=GREY, ms=5.5, gid=f"turn-{turn.key}", in_layout=False, zorder=3)
    ax.annotate(_signed(y, 1), (x, edge), (5, 0), textcoords="offset points", fontsize=6.5, va="center", color=GREY)


def _mark(ax: Axes, x: float, y: float, turn: Seen) -> None:
    """Draw a turn as a mark that can be chosen."""
    side = math.copysign(1.0, turn.turn.commanded_wheel_deg)
    gid = f"turn-{turn.key}"
    if turn.left_out:
        ax.plot([x], [y], "x", color=GREY, ms=5.0, mew=1.2, gid=gid, zorder=3, in_layout=False)
    else:
        filled = SIDE_COLOUR[side] if side > 0 else "white"
        ax.plot(
            [x], [y], SIDE_MARK[side], mfc=filled, mec=SIDE_COLOUR[side], mew=1.1, ms=4.4, gid=gid, zorder=3,
            in_layout=False,
        )  # fmt: skip


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


def repeats_picture(subject: Subject) -> Picture | None:
    """Plot the repeats of each command about the angle it aims at or their mean."""
    if subject.result is None or not subject.usable:
        return None
    fit = subject.result.fit
    groups: dict[tuple[float, float], list[Seen]] = defaultdict(list)
    for turn in subject.usable:
        state = turn.reversed_ if fit.model.dead_band and math.isfinite(turn.reversed_) else 0.0
        groups[turn.turn.commanded_wheel_deg, state].append(turn)
    keys = sorted(groups, key=lambda key: (key[0] < 0, abs(key[0]), key[1]))
    name = f"repeats-{subject.letter}"
    with drawing(WIDE_IN, 0.6 + 0.30 * len(keys)) as (figure, ax):
        reach = 1.15 * max(_row_reach(fit, groups[key]) for key in keys)
        said = [_repeat_row(ax, row, fit, groups[key], reach) for row, key in enumerate(keys)]
        for row, key in enumerate(keys):
            _beside(ax, row, _group(fit, groups[key]), reach)
        ax.set_xlim(-reach, reach)
        ax.set_ylim(len(keys) - 0.4, -0.6)
        ax.set_yticks(range(len(keys)), [_repeat_label(groups[key], fit) for key in keys])
        ax.axvline(0.0, color=HAIR, lw=0.6, zorder=0.5)
        ax.set_xlabel("further (+) or less far (−) along the command than the mean of its repeats, deg")
        alt = "Repeats of each command about their mean. " + " ".join(said)
        svg = svg_of(figure, name, alt)
    return Picture(
        name=name,
        title="Repeats of each command",
        caption=(
            "Black bar: mean with its 95 % interval. Brackets: interval that holds 95 % of all turns with 95 % "
            "confidence, from the fitted scatter (ISO 16269-6). Green diamond: the usual angle that the command comes "
            "nearest to, where it lies inside the plot. Triangle: a turn beyond it."
        ),
        alt=alt,
        svg=svg,
        shape="wide",
    )


def _repeat_label(turns: Sequence[Seen], fit: Fit) -> str:
    wheel = turns[0].turn.commanded_wheel_deg
    start = ""
    if fit.model.dead_band:
        start = ", reversed" if turns[0].reversed_ == 1.0 else ", same way"
    return f"{_signed(wheel)}{start}  ×{len(turns)}"


def _signed(value: float, decimals: int | None = None) -> str:
    """Return a number with its sign, a true minus."""
    return (f"{value:+g}" if decimals is None else f"{value:+.{decimals}f}").replace("-", "\u2212")


@dataclass(frozen=True, kw_only=True, slots=True)
class _Group:
    """The repeats of one command, along it: mean, half widths of its interval and of that of all turns."""

    side: float
    n: int
    mean_deg: float
    half_mean_deg: float
    half_all_deg: float


def _group(fit: Fit, turns: Sequence[Seen]) -> _Group:
    side = math.copysign(1.0, turns[0].turn.commanded_wheel_deg)
    counted = [turn for turn in turns if not turn.left_out] or list(turns)
    mean, n = float(np.mean([turn.turn.heading_change_deg * side for turn in counted])), len(counted)
    scatter = fit.scatter_at_deg(mean) if mean > 0 else fit.scatter_deg
    u_mean = math.hypot(scatter, fit.u_typical_deg) / math.sqrt(n)
    return _Group(
        side=side,
        n=n,
        mean_deg=mean,
        half_mean_deg=t_quantile(0.95, fit.dof) * u_mean,
        half_all_deg=tolerance_factor(n, fit.dof, 0.95, 0.95) * scatter if scatter > 0.0 else 0.0,
    )


def _row_reach(fit: Fit, turns: Sequence[Seen]) -> float:
    group = _group(fit, turns)
    off = [abs(turn.turn.heading_change_deg * group.side - group.mean_deg) for turn in turns if not turn.is_stray]
    return max([group.half_all_deg, group.half_mean_deg, *off, 1e-3])


def _repeat_row(ax: Axes, row: int, fit: Fit, turns: Sequence[Seen], reach: float) -> str:
    """Draw the repeats of one command; return in words what they show."""
    group = _group(fit, turns)
    all_deg, mean_deg = group.half_all_deg, group.half_mean_deg
    ax.plot([-all_deg, all_deg], [row, row], color=HAIR, lw=0.8, zorder=1)
    for end in (-all_deg, all_deg):
        ax.plot([end, end], [row - 0.22, row + 0.22], color=GREY, lw=0.9, zorder=1)
    ax.plot([-mean_deg, mean_deg], [row + 0.28, row + 0.28], color=INK, lw=2.2, solid_capstyle="butt", zorder=2)
    for turn in turns:
        x = turn.turn.heading_change_deg * group.side - group.mean_deg
        if abs(x) <= reach:
            _mark(ax, x, row - 0.05, turn)
            continue
        edge = math.copysign(0.98 * reach, x)
        ax.plot(
            [edge],
            [row - 0.05],
            ">" if x > 0 else "<",
            color=GREY,
            ms=5.5,
            gid=f"turn-{turn.key}",
            in_layout=False,
            zorder=3,
        )
        shift, side = (-6, "right") if x > 0 else (6, "left")
        ax.annotate(
            _signed(x, 1),
            (edge, row - 0.05),
            (shift, 0),
            textcoords="offset points",
            fontsize=6.5,
            ha=side,
            va="center",
        )
    return (
        f"{turns[0].turn.commanded_wheel_deg:+g} wheel degrees, {group.n} turns: mean "
        f"{group.side * group.mean_deg:+.2f} degrees, interval of turns plus or minus {two_digits(all_deg)}."
    )


def nearest_usual_deg(mean_deg: float) -> float | None:
    """Return the usual angle that a mean heading change comes near to, if there is one."""
    nearest = min((*USUAL_DEG, 30.0, 60.0, 120.0, 135.0, 270.0), key=lambda angle: abs(abs(mean_deg) - angle))
    return nearest if abs(abs(mean_deg) - nearest) <= NEAR_DEG else None


def _beside(ax: Axes, row: int, group: _Group, reach: float) -> None:
    """Write the mean beside its row, and where the usual angle lies from it; mark that angle if it is in reach."""
    side, mean = group.side, group.mean_deg
    wanted = nearest_usual_deg(mean)
    text = f"mean {_signed(side * mean, 2)}°"
    if wanted is not None:
        off = wanted - mean
        text += f"; {_signed(side * wanted)}° is {abs(off):.2f}° {'less' if off < 0 else 'further'}"
        if abs(off) <= reach:
            ax.plot([off], [row], "D", color=GREEN, ms=4.4, mec="white", mew=0.6, zorder=2.5)
    ax.text(1.015, row, text, transform=ax.get_yaxis_transform(), va="center", fontsize=7.0)


def order_picture(subject: Subject) -> Picture | None:
    """Plot how far each turn is from the fit against the order driven."""
    usable = subject.usable
    if subject.result is None or len(usable) < 3:
        return None
    name = f"order-{subject.letter}"
    with drawing(HALF_IN, 2.2) as (figure, ax):
        reach = _scatter_band(ax, subject)
        for turn in usable:
            _residual(ax, turn.order, turn, reach)
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
    for number in range(len(subject.measurements)):
        order = [turn.order for turn in subject.seen if turn.key.startswith(f"{subject.letter}{number + 1}-")]
        if len(order) > 1:
            ends = np.array([order[0], order[-1]], dtype=float)
            ax.plot(ends, slope.value * (ends - ends.mean()), color=GREEN, lw=1.2, ls=(0, (5, 2)))
    p = check.p_adjusted if check else math.nan
    seen = "seen" if p <= SEEN_LEVEL else "not seen"
    return (
        f"Dashed: {_signed(slope.value, 3)} degrees a turn ({_signed(slope.low, 3)} to {_signed(slope.high, 3)}, "
        f"{100.0 * slope.confidence:g} %); a trend is {seen} (p = {p:.2g}, adjusted)."
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
            _residual(ax, turn.turn.start_heading_deg % 360.0, turn, reach)
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


def path_picture(subject: Subject, number: int) -> Picture | None:
    """Plot the path of the robot on the floor to scale, and its spin centres enlarged."""
    one = subject.measurements[number]
    seen = [turn for turn in subject.seen if turn.key.startswith(f"{subject.letter}{number + 1}-")]
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


def budget_picture(subject: Subject, number: int) -> Picture | None:
    """Plot the uncertainty budget of a heading change beside the scatter of the robot."""
    one = subject.measurements[number]
    lines = sorted((line for line in one.budget if math.isfinite(line.u_deg)), key=lambda line: -line.u_deg)
    if not lines:
        return None
    total = math.sqrt(math.fsum(line.u_deg**2 for line in lines))
    name = f"budget-{subject.letter}{number + 1}"
    with drawing(HALF_IN, 0.75 + 0.24 * (len(lines) + 1)) as (figure, ax):
        labels = [*(_plain(line.name, 60) for line in lines), "together"]
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


def pictures_of(subject: Subject) -> list[Picture]:
    """Return all plots of a subject that its data allow."""
    n_clips = range(len(subject.measurements))
    found = [
        relation_picture(subject),
        tyre_picture(subject),
        budget_picture(subject, 0),
        repeats_picture(subject),
        order_picture(subject),
        start_picture(subject),
        *(heading_picture(subject, n) for n in n_clips),
        *(path_picture(subject, n) for n in n_clips),
        *(budget_picture(subject, n) for n in n_clips[1:]),
    ]
    return [one for one in found if one is not None]
