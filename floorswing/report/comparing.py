"""Several surfaces or robots side by side: the table, the differences in words, and their plots."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass

from markupsafe import Markup

from calib.command import command_for
from calib.compare import CANNOT_TELL, DIFFERENT, MARGIN_DEG, SAME, Pair, compare_tables
from calib.compare import Comparison as Pairs
from calib.errors import CalibError
from calib.fit import Fit
from floorswing.comparing import comparison_sentences
from floorswing.numbers import two_digits
from floorswing.report.gather import Subject
from floorswing.report.marks import Picture
from floorswing.report.plotting import (
    BLUE,
    GREEN,
    HAIR,
    INK,
    PALE,
    SUBJECT_LOOK,
    VERMILION,
    WIDE_IN,
    drawing,
    pad,
    svg_of,
)
from floorswing.report.sentences import named, signed, visible, with_u


@dataclass(frozen=True, kw_only=True, slots=True)
class Line:
    """One subject in the table of a comparison, ready to show."""

    letter: str
    name: Markup
    turns: str
    gain: str
    plus: str
    minus: str
    lands: str
    scatter: str
    doubts: str


@dataclass(frozen=True, kw_only=True, slots=True)
class Comparison:
    """What the page says of several subjects together."""

    answer: tuple[Markup, ...]
    lines: tuple[Line, ...]
    note: str
    sentences: tuple[Markup, ...]
    pictures: tuple[Picture, ...]


def title_of(subject: Subject) -> Markup:
    """Return robot and surface as people typed them."""
    return Markup("{} on {}").format(named(subject.robot), named(subject.surface))


def compared(subjects: Sequence[Subject], n_doubts: Sequence[int], margin_deg: float = MARGIN_DEG) -> Comparison:
    """Return the comparison of two or more subjects, each pair at a quarter turn each way.

    Parameters
    ----------
    subjects : sequence of Subject
    n_doubts : sequence of int
        How many reservations each has.
    margin_deg : float
        Difference of heading that does not matter.
    """
    fitted = [one for one in subjects if one.result is not None and one.table is not None]
    lines = tuple(_line(one, count) for one, count in zip(subjects, n_doubts, strict=True))
    starred = any("*" in line.plus + line.minus for line in lines)
    found, why_not = _pairs(fitted, margin_deg)
    names = {_group_name(one): _short(one, fitted) for one in fitted}
    return Comparison(
        answer=tuple(_answers(found, names)) if found else (Markup("Nothing can be compared: {}.").format(why_not),),
        lines=lines,
        note="* Extrapolated: such commands were not tried there." if starred else "",
        sentences=tuple(_told(found)) if found else (),
        pictures=tuple(_pictures(fitted, found)) if found else (),
    )


def _pairs(fitted: Sequence[Subject], margin_deg: float) -> tuple[Pairs | None, str]:
    """Return the pairs held against each other, or why they cannot be."""
    if len(fitted) < 2:
        return None, "fewer than two of these allow a fit"
    tables = [(_group_name(one), one.table) for one in fitted if one.table is not None]
    try:
        return compare_tables(tables, margin_deg=margin_deg), ""
    except CalibError as error:
        return None, visible(str(error))


def _group_name(subject: Subject) -> str:
    return subject.letter


def _told(found: Pairs) -> list[Markup]:
    """Return all that the comparison says, the groups by their letters."""
    return [Markup("{}").format(signed(visible(one)).replace(" %", "\u00a0%")) for one in comparison_sentences(found)]


def _line(subject: Subject, n_doubts: int) -> Line:
    doubts = "none" if n_doubts == 0 else str(n_doubts)
    n_turns = str(len(subject.seen))
    if subject.result is None:
        blank = dict.fromkeys(("gain", "plus", "minus", "lands", "scatter"), "no fit")
        return Line(letter=subject.letter, name=title_of(subject), turns=n_turns, doubts=doubts, **blank)
    fit = subject.result.fit
    value, low, high = with_u(fit.gain())
    scatter = fit.repeatability_deg()
    return Line(
        letter=subject.letter,
        name=title_of(subject),
        turns=n_turns,
        gain=f"{value} ({low} to {high})",
        plus=_command(fit, 90.0),
        minus=_command(fit, -90.0),
        lands=_lands(fit),
        scatter=f"{two_digits(scatter.value)} ({two_digits(scatter.low)} to {two_digits(scatter.high)})",
        doubts=doubts,
    )


def _command(fit: Fit, wanted_deg: float) -> str:
    try:
        one = command_for(fit, wanted_deg)
    except CalibError:
        return "not driven"
    return signed(with_u(one.wheel_deg, sign=True)[0]) + ("*" if one.extrapolated else "")


def _lands(fit: Fit) -> str:
    one = command_for(fit, fit.sides[0] * 90.0)
    return f"±{two_digits(0.5 * (one.high_deg - one.low_deg))}°"


def _answers(found: Pairs, names: dict[str, Markup]) -> list[Markup]:
    """Return a sentence for each pair with the first, at the first angle compared."""
    first, angle = found.groups[0].name, found.pairs[0].wanted_deg
    return [
        _verdict(pair, found.margin_deg, names)
        for pair in found.pairs
        if pair.first == first and pair.wanted_deg == angle
    ]


def _verdict(pair: Pair, margin_deg: float, names: dict[str, Markup]) -> Markup:
    """Return what is said of a pair, and what to do."""
    side = math.copysign(1.0, pair.wanted_deg)
    apart, (here, there) = pair.heading_deg, pair.commands_wheel_deg
    text = {
        SAME: (
            "{b} turns like {a} within {margin}: {value} degrees apart at a turn of {angle} ({low} to {high}, "
            "95\u00a0%). The command {here} serves both."
        ),
        DIFFERENT: (
            "{b} turns {value} degrees {way} than {a} at a turn of {angle} ({low} to {high}, 95\u00a0%): command "
            "{there} where {here} serves on {letter}."
        ),
        CANNOT_TELL: (
            "Whether {b} turns like {a} within {margin} cannot be told yet: they are {value} degrees apart at a turn "
            "of {angle} ({low} to {high}, 95\u00a0%). {more}"
        ),
    }[pair.verdict]
    more = f"About {pair.more} more {pair.more_of} of each would tell." if pair.more is not None else ""
    return Markup(text).format(
        a=names[pair.first],
        b=names[pair.second],
        letter=pair.first,
        margin=f"{margin_deg:g} degree{'' if margin_deg == 1.0 else 's'}",
        value=two_digits(abs(apart.value)),
        way="further" if side * apart.value > 0 else "less far",
        angle=signed(f"{pair.wanted_deg:+g}"),
        low=signed(f"{apart.low:+.2f}"),
        high=signed(f"{apart.high:+.2f}"),
        here=signed(f"{here:+.1f}"),
        there=signed(f"{there:+.1f}"),
        more=more,
    )


def _short(subject: Subject, among: Sequence[Subject]) -> Markup:
    """Return what tells a subject from the others, with its letter."""
    one_robot = len({one.robot for one in among}) == 1
    name = named(subject.surface) if one_robot else title_of(subject)
    return Markup("<strong>{}</strong> ({})").format(name, subject.letter)


def _pictures(fitted: Sequence[Subject], found: Pairs) -> list[Picture]:
    return [_side_by_side(fitted), _differences(found)]


def _differences(found: Pairs) -> Picture:
    """Plot the difference of each pair, with its interval, against the margin."""
    pairs = found.pairs
    with drawing(WIDE_IN, 0.75 + 0.26 * len(pairs)) as (figure, ax):
        ax.axvspan(-found.margin_deg, found.margin_deg, color=PALE, lw=0)
        ax.axvline(0.0, color=HAIR, lw=0.8)
        for row, pair in enumerate(pairs):
            one = pair.heading_deg
            colour, mark = _VERDICT_LOOK[pair.verdict]
            ax.plot([one.low, one.high], [row, row], color=colour, lw=1.6)
            fill = "white" if pair.verdict == CANNOT_TELL else colour
            ax.plot([one.value], [row], mark, mec=colour, mfc=fill, ms=5.5)
            ax.text(1.015, row, pair.verdict, transform=ax.get_yaxis_transform(), va="center", fontsize=7.0)
        labels = [signed(f"{pair.second} less {pair.first}, at {pair.wanted_deg:+g}°") for pair in pairs]
        ax.set_yticks(range(len(pairs)), labels)
        ax.set_ylim(len(pairs) - 0.5, -0.5)
        pad(ax, x=0.06)
        ax.set_xlabel("difference of heading for the same command, deg")
        said = "; ".join(
            f"{pair.second} less {pair.first} at {pair.wanted_deg:+g} degrees {pair.heading_deg.value:+.2f}, "
            f"{pair.verdict}"
            for pair in pairs
        )
        alt = f"Differences of heading with 95 % intervals against a margin of {found.margin_deg:g} degrees: {said}."
        svg = svg_of(figure, "differences", alt)
    return Picture(
        name="differences",
        title="Differences and the margin",
        caption=(
            f"Marks with 95 % intervals; shaded: within {found.margin_deg:g} degrees either way, which does not "
            "matter. Diamond: the same within the margin; triangle: different; open circle: cannot be told yet. The "
            "verdicts are adjusted over all pairs."
        ),
        alt=alt,
        svg=svg,
        shape="wide",
    )


_VERDICT_LOOK = {SAME: (GREEN, "D"), DIFFERENT: (VERMILION, "^"), CANNOT_TELL: (BLUE, "o")}


def _side_by_side(fitted: Sequence[Subject]) -> Picture:
    """Plot gain, difference from the first, and repeatability of each subject, with intervals."""
    fits = [one.result.fit for one in fitted if one.result is not None]
    columns = [
        ("heading per wheel degree", [fit.gain() for fit in fits]),
        ("repeatability, deg", [fit.repeatability_deg() for fit in fits]),
    ]
    with drawing(WIDE_IN, 0.75 + 0.3 * len(fitted), columns=2, sharey=True) as (figure, axes):
        for ax, (label, values) in zip(axes, columns, strict=True):
            for row, one in enumerate(values):
                colour, mark = SUBJECT_LOOK[row % len(SUBJECT_LOOK)]
                ax.plot([one.low, one.high], [row, row], color=colour, lw=1.6)
                ax.plot([one.value], [row], mark, color=colour, ms=5)
            ax.set_xlabel(label)
            pad(ax, x=0.08)
        axes[0].set_yticks(range(len(fitted)), [one.letter for one in fitted], color=INK)
        axes[0].set_ylim(len(fitted) - 0.5, -0.5)
        parts = "; ".join(
            f"{one.letter} {fit.gain().value:.4f} and {two_digits(fit.scatter_deg)} degrees"
            for one, fit in zip(fitted, fits, strict=True)
        )
        alt = f"Heading per wheel degree and repeatability side by side: {parts}."
        svg = svg_of(figure, "side-by-side", alt)
    return Picture(
        name="side-by-side",
        title="Side by side",
        caption="Marks with their 95 % intervals.",
        alt=alt,
        svg=svg,
        shape="wide",
    )
