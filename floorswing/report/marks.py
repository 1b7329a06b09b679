"""What the plots share: the picture record, and how a turn is drawn so that it can be chosen."""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import TYPE_CHECKING

from calib.intervals import t_quantile
from floorswing.report.gather import Seen, Subject
from floorswing.report.plotting import GREY, SIDE_COLOUR, SIDE_MARK

if TYPE_CHECKING:
    from matplotlib.axes import Axes


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


def mark(ax: Axes, x: float, y: float, turn: Seen) -> None:
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


def signed_number(value: float, decimals: int | None = None) -> str:
    """Return a number with its sign, a true minus."""
    return (f"{value:+g}" if decimals is None else f"{value:+.{decimals}f}").replace("-", "\u2212")


def plain_letters(text: str, most: int = 16) -> str:
    """Return the letters of a text that the plots' font has for certain."""
    return "".join(c if c.isascii() and c.isprintable() else "?" for c in text)[:most]


def residual_reach_deg(subject: Subject) -> float:
    """Return how far a plot of distances from the fit reaches: the turns in the fit and their band, not the strays."""
    assert subject.result is not None
    fit = subject.result.fit
    kept = [abs(turn.along_deg) for turn in subject.usable if not turn.is_stray]
    return 1.15 * max([*kept, t_quantile(0.95, fit.dof) * fit.scatter_deg, 1e-3])


def residual_mark(ax: Axes, x: float, turn: Seen, reach: float) -> None:
    """Draw a turn at its distance from the fit; one beyond the plot at its edge, with the number."""
    y = turn.along_deg
    if abs(y) <= reach:
        mark(ax, x, y, turn)
        return
    edge = math.copysign(0.95 * reach, y)
    ax.plot([x], [edge], "^" if y > 0 else "v", color=GREY, ms=5.5, gid=f"turn-{turn.key}", in_layout=False, zorder=3)
    ax.annotate(
        signed_number(y, 1), (x, edge), (5, 0), textcoords="offset points", fontsize=6.5, va="center", color=GREY
    )


def turns_of(subject: Subject, number: int) -> list[Seen]:
    """Return the turns of one clip of a subject, by its place among the clips."""
    return [turn for turn in subject.seen if turn.key.startswith(f"{subject.letter}{number + 1}-")]
