"""The plot of the repeats of each command."""

from __future__ import annotations

import math
from collections import defaultdict
from collections.abc import Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from calib.fit import Fit
from calib.intervals import t_quantile
from calib.tolerance import tolerance_factor
from floorswing.numbers import two_digits
from floorswing.report.gather import USUAL_DEG, Seen, Subject
from floorswing.report.marks import Picture, mark, signed_number
from floorswing.report.plotting import GREEN, GREY, HAIR, INK, WIDE_IN, drawing, svg_of
from floorswing.turn_tables import WANTED_COLUMN
from floorswing.turn_tables import number as number_of

if TYPE_CHECKING:
    from matplotlib.axes import Axes


NEAR_DEG = 6.0
"""A command aims at a usual angle if the fit puts it this near."""


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
            "confidence, from the fitted scatter (ISO 16269-6). Green diamond: the wanted angle, or where the trial "
            "gives none the usual angle that the command comes near to. Triangle: a turn beyond the plot."
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
    return f"{signed_number(wheel)}{start}  ×{len(turns)}"


@dataclass(frozen=True, kw_only=True, slots=True)
class _Group:
    """The repeats of one command along it: mean, wanted or near usual angle, half widths for the mean and all turns."""

    side: float
    n: int
    mean_deg: float
    wanted_deg: float | None
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
        wanted_deg=_wanted_deg(turns, mean),
        half_mean_deg=t_quantile(0.95, fit.dof) * u_mean,
        half_all_deg=tolerance_factor(n, fit.dof, 0.95, 0.95) * scatter if scatter > 0.0 else 0.0,
    )


def _wanted_deg(turns: Sequence[Seen], mean_deg: float) -> float | None:
    """Return the size of turn that the trial wants of a command, else the usual angle near its mean."""
    given = {abs(number_of(turn.turn.factors.get(WANTED_COLUMN, ""))) for turn in turns}
    if len(given) == 1 and math.isfinite(wanted := given.pop()):
        return wanted
    return nearest_usual_deg(mean_deg)


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
            mark(ax, x, row - 0.05, turn)
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
            signed_number(x, 1),
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
    wanted = group.wanted_deg
    text = f"mean {signed_number(side * mean, 2)}°"
    if wanted is not None:
        off = wanted - mean
        text += f"; {signed_number(side * wanted)}° is {abs(off):.2f}° {'less' if off < 0 else 'further'}"
        if abs(off) <= reach:
            ax.plot([off], [row], "D", color=GREEN, ms=4.4, mec="white", mew=0.6, zorder=2.5)
    ax.text(1.015, row, text, transform=ax.get_yaxis_transform(), va="center", fontsize=7.0)
