"""Several surfaces or robots side by side: the table, the differences in words, and their plots."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass

from markupsafe import Markup

from calib.command import command_for
from calib.errors import CalibError
from calib.fit import Fit
from calib.intervals import Estimate, ratio_estimate
from floorswing.numbers import two_digits
from floorswing.report.figures import Picture
from floorswing.report.gather import Subject
from floorswing.report.plotting import HAIR, INK, SUBJECT_LOOK, WIDE_IN, drawing, pad, svg_of
from floorswing.report.sentences import named, signed, with_u


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


def compared(subjects: Sequence[Subject], n_doubts: Sequence[int]) -> Comparison:
    """Return the comparison of two or more subjects; the first is what the others are held against.

    Parameters
    ----------
    subjects : sequence of Subject
    n_doubts : sequence of int
        How many reservations each has.
    """
    fitted = [one for one in subjects if one.result is not None]
    lines = tuple(_line(one, count) for one, count in zip(subjects, n_doubts, strict=True))
    starred = any("*" in line.plus + line.minus for line in lines)
    return Comparison(
        answer=tuple(_answers(fitted)),
        lines=lines,
        note="* Extrapolated: such commands were not tried there." if starred else "",
        sentences=tuple(_sentences(fitted)),
        pictures=tuple(_pictures(fitted)),
    )


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


def relative_gain(one: Fit, first: Fit) -> Estimate:
    """Return how much further a wheel degree turns the robot than in the first fit, as a share.

    The two fits are independent; the interval is Fieller's, with the fewer degrees of freedom of the two.
    """
    a, b = one.gain(), first.gain()
    ratio = ratio_estimate(
        a.value,
        b.value,
        var_above=a.u**2,
        var_below=b.u**2,
        cov=0.0,
        dof=min(one.dof, first.dof),
        confidence=0.95,
    )
    return Estimate(value=ratio.value - 1.0, u=ratio.u, low=ratio.low - 1.0, high=ratio.high - 1.0, confidence=0.95)


def _answers(fitted: Sequence[Subject]) -> list[Markup]:
    if len(fitted) < 2:
        return [Markup("Fewer than two of these could be fitted, so nothing can be compared.")]
    first, *others = fitted
    said = []
    for one in others:
        assert one.result is not None
        assert first.result is not None
        apart = relative_gain(one.result.fit, first.result.fit)
        told = apart.low > 0.0 or apart.high < 0.0
        text = (
            "{b} turns {value} {way} for the same command than {a} ({low} to {high}, 95\u00a0%)."
            if told
            else "{b} and {a} turn alike for the same command as far as these turns tell: {value} apart "
            "({low} to {high}, 95\u00a0%)."
        )
        said.append(
            Markup(text).format(
                a=_short(first, fitted),
                b=_short(one, fitted),
                value=f"{abs(apart.value):.2%}",
                way="further" if apart.value > 0 else "less far",
                low=signed(f"{apart.low:+.2%}"),
                high=signed(f"{apart.high:+.2%}"),
            )
        )
    return said


def _short(subject: Subject, among: Sequence[Subject]) -> Markup:
    """Return what tells a subject from the others, with its letter."""
    one_robot = len({one.robot for one in among}) == 1
    name = named(subject.surface) if one_robot else title_of(subject)
    return Markup("<strong>{}</strong> ({})").format(name, subject.letter)


def _sentences(fitted: Sequence[Subject]) -> list[Markup]:
    if len(fitted) < 2:
        return []
    spread = sorted(fitted, key=lambda one: one.result.fit.scatter_deg if one.result else math.inf)
    best, worst = spread[0], spread[-1]
    assert best.result is not None
    assert worst.result is not None
    a, b = best.result.fit.repeatability_deg(), worst.result.fit.repeatability_deg()
    apart = "which is more than these intervals leave to chance" if b.low > a.high else "but the intervals overlap"
    return [
        Markup(
            "Turns repeat best on {best}, {a} degrees (standard deviation, {a_low} to {a_high}), and worst on {worst}, "
            "{b} degrees ({b_low} to {b_high}), {apart}."
        ).format(
            best=_short(best, fitted),
            worst=_short(worst, fitted),
            a=two_digits(a.value),
            a_low=two_digits(a.low),
            a_high=two_digits(a.high),
            b=two_digits(b.value),
            b_low=two_digits(b.low),
            b_high=two_digits(b.high),
            apart=apart,
        )
    ]


def _pictures(fitted: Sequence[Subject]) -> list[Picture]:
    return [_side_by_side(fitted)] if len(fitted) > 1 else []


def _side_by_side(fitted: Sequence[Subject]) -> Picture:
    """Plot gain, difference from the first, and repeatability of each subject, with intervals."""
    fits = [one.result.fit for one in fitted if one.result is not None]
    columns: list[tuple[str, list[Estimate | None]]] = [
        ("heading per wheel degree", [fit.gain() for fit in fits]),
        (
            f"difference from {fitted[0].letter}, %",
            [None, *(_percent(fit, fits[0]) for fit in fits[1:])],
        ),
        ("repeatability, deg", [fit.repeatability_deg() for fit in fits]),
    ]
    with drawing(WIDE_IN, 0.75 + 0.3 * len(fitted), columns=3, sharey=True) as (figure, axes):
        for ax, (label, values) in zip(axes, columns, strict=True):
            for row, one in enumerate(values):
                colour, mark = SUBJECT_LOOK[row % len(SUBJECT_LOOK)]
                if one is None:
                    ax.plot([0.0], [row], mark, mfc="white", mec=colour)
                    continue
                ax.plot([one.low, one.high], [row, row], color=colour, lw=1.6)
                ax.plot([one.value], [row], mark, color=colour, ms=5)
            ax.set_xlabel(label)
            pad(ax, x=0.08)
        axes[1].axvline(0.0, color=HAIR, lw=0.8, zorder=0.5)
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
        caption=(
            "Marks with their 95 % intervals. A difference whose interval keeps clear of the line at 0 is told apart."
        ),
        alt=alt,
        svg=svg,
        shape="wide",
    )


def _percent(fit: Fit, first: Fit) -> Estimate:
    one = relative_gain(fit, first)
    value, u, low, high = (100.0 * part for part in (one.value, one.u, one.low, one.high))
    return Estimate(value=value, u=u, low=low, high=high, confidence=one.confidence)
