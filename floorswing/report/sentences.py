"""The answer in words, the table of what to command, and what spoils confidence in either.

Sentences are `Markup`: what people typed goes in through ``format``, which escapes it, between ``bdi`` tags, so that a
name in another direction of writing does not turn the sentence round.
"""

from __future__ import annotations

import math
import re
import unicodedata
from collections import defaultdict
from collections.abc import Iterable, Sequence
from dataclasses import dataclass

from markupsafe import Markup

from calib.command import Command, command_for, tells_reversal
from calib.errors import CalibError
from calib.fit import UNKNOWN_SLACK, Fit
from calib.intervals import Estimate
from calib.models import SIDE_NAMES
from floorswing.consistency_report import consistency_sentences
from floorswing.fitting import FitResult, contact_sentence, quantities
from floorswing.numbers import decimals_for, two_digits
from floorswing.report.gather import USUAL_DEG, Seen, Subject
from floorswing.summary import COVERAGE

LONGEST_NAME = 60
FEW_DOF = 8
"""With fewer degrees of freedom the interval of a standard deviation spans a factor of three and more."""


def named(text: str, most: int = LONGEST_NAME) -> Markup:
    """Return a name that somebody typed: escaped, shortened, and kept from turning the text around it."""
    shown = visible(text)
    shown = shown if len(shown) <= most else f"{shown[: most - 1]}…"
    return Markup("<bdi>{}</bdi>").format(shown)


def visible(text: str) -> str:
    """Return text with characters that cannot stand in a page replaced."""
    return "".join("\ufffd" if unicodedata.category(c) in ("Cc", "Cs") and c not in "\n\t" else c for c in text)


def with_u(estimate: Estimate, *, sign: bool = False) -> tuple[str, str, str]:
    """Return value, low and high to the first digit of the uncertainty: what a person types in and remembers."""
    decimals = max(decimals_for(estimate.u) - 1, 0) if estimate.u > 0.0 and math.isfinite(estimate.u) else 3
    form = f"{'+' if sign else ''}.{decimals}f"
    low, high = (
        format(round(end, decimals) + 0.0, form) if math.isfinite(end) else "no bound"
        for end in (estimate.low, estimate.high)
    )
    return format(round(estimate.value, decimals) + 0.0, form), low, high


def signed(text: str) -> str:
    """Return text with true minus signs before its numbers."""
    return re.sub(r"(?<!\w)-(?=\.?\d)", "\u2212", text)


@dataclass(frozen=True, kw_only=True, slots=True)
class Cell:
    """What to command for one angle, ready to show; `said` is empty where it can be told.

    Parameters
    ----------
    wanted, wheel, low, high, lands : str
    extrapolated : bool
    said : str
        Why nothing can be told.
    """

    wanted: str
    wheel: str = ""
    low: str = ""
    high: str = ""
    lands: str = ""
    extrapolated: bool = False
    said: str = ""


@dataclass(frozen=True, kw_only=True, slots=True)
class Side:
    """The table of one direction and start."""

    name: str
    start: str
    cells: tuple[Cell, ...]


def answer(subject: Subject) -> list[Markup]:
    """Return the answer in sentences, the most asked for first."""
    result = subject.result
    place = {"robot": named(subject.robot), "surface": named(subject.surface)}
    if result is None:
        return [
            Markup("No relation between command and turn could be found for {robot} on {surface}: {why}.").format(
                why=subject.no_fit, **place
            ),
            _reading(subject),
        ]
    said = [_command_sentence(result.fit, place), _gain_sentence(result.fit), _repeat_sentence(result.fit)]
    said.extend(_reversal(result.fit))
    contact = quantities(result, None)["contact_fraction"]
    if contact is not None:
        said.append(Markup("{}").format(contact_sentence(_estimate(contact))))
    return [*said, _reading(subject)]


def _estimate(bounds: dict[str, float | None]) -> Estimate:
    ends = {name: math.inf if bounds[name] is None else bounds[name] for name in ("value", "u", "low", "high")}
    return Estimate(confidence=0.95, **{name: float(value or 0.0) for name, value in ends.items()})


def _command_sentence(fit: Fit, place: dict[str, Markup]) -> Markup:
    known = [command_for(fit, side * _told_angle(fit)) for side in fit.sides]
    parts = [
        Markup("<strong>{wheel}</strong> wheel degrees ({low} to {high}) {way}").format(
            wheel=signed(with_u(one.wheel_deg, sign=True)[0]),
            low=signed(with_u(one.wheel_deg, sign=True)[1]),
            high=signed(with_u(one.wheel_deg, sign=True)[2]),
            way=SIDE_NAMES[math.copysign(1.0, one.wanted_deg)],
        )
        for one in known
    ]
    half = max(0.5 * (one.high_deg - one.low_deg) for one in known)
    return Markup(
        "To turn {robot} by {angle} degrees on {surface}, command {parts}. A single turn then lands within "
        "<strong>±{half} degrees</strong> of it 95 times in 100{caveat}."
    ).format(
        angle=f"{_told_angle(fit):g}",
        parts=Markup(" or ").join(parts),
        half=two_digits(half),
        caveat=", if what holds at the sizes driven holds here too" if known[0].extrapolated else "",
        **place,
    )


def _told_angle(fit: Fit) -> float:
    """Return the usual angle to speak of: 90 degrees if such turns were driven, else the nearest that were."""
    driven = [angle for angle in (90.0, *USUAL_DEG) if not command_for(fit, fit.sides[0] * angle).extrapolated]
    return driven[0] if driven else 90.0


def _gain_sentence(fit: Fit) -> Markup:
    value, low, high = with_u(fit.gain())
    return Markup("Each wheel degree gives {} degrees of heading ({} to {}, 95\u00a0%), from {} turns.").format(
        value, low, high, fit.n_turns
    )


def _repeat_sentence(fit: Fit) -> Markup:
    scatter = fit.repeatability_deg()
    return Markup(
        "Repeats scatter by {} degrees for turns of about {:.0f} degrees (standard deviation; between {} and {}, "
        "95\u00a0%)."
    ).format(two_digits(scatter.value), fit.size_deg, two_digits(scatter.low), two_digits(scatter.high))


def _reversal(fit: Fit) -> list[Markup]:
    band = fit.dead_band_wheel_deg()
    if band is None:
        return []
    value, low, high = map(signed, with_u(band))
    if band.low > 0.0:
        text = "After a turn the other way, command {} wheel degrees more ({} to {}): that much is lost to slack."
        return [Markup(text).format(value, low, high)]
    return [
        Markup("No slack is seen: a start against the turn before loses {} wheel degrees ({} to {}).").format(
            value, low, high
        )
    ]


def _reading(subject: Subject) -> Markup:
    known = sorted(
        one.turn.u_heading_change_deg for one in subject.seen if math.isfinite(one.turn.u_heading_change_deg)
    )
    turns = f"{len(subject.seen)} turn{'' if len(subject.seen) == 1 else 's'}"
    if not known:
        return Markup("{} were seen.").format(turns)
    typical = two_digits(COVERAGE * known[len(known) // 2])
    read = Markup("{} were seen, each read to about ±{} degrees (95\u00a0%).").format(turns, typical)
    apart = [one for one in subject.seen if one.left_out == UNKNOWN_SLACK]
    if not apart:
        return read
    return read + Markup(" Not in the fit: {}, since {}.").format(_listed(apart, subject), UNKNOWN_SLACK)


def sides_of(subject: Subject, *, every_start: bool = False) -> list[Side]:
    """Return the tables of what to command, one for each direction (and start, where asked for)."""
    if subject.result is None:
        return []
    fit = subject.result.fit
    starts = (False, True) if every_start and tells_reversal(fit) else (False,)
    return [
        Side(
            name=SIDE_NAMES[side].capitalize(),
            start=("start reversed" if start else "start the same way") if tells_reversal(fit) else "",
            cells=tuple(_cell(fit, side * angle, start) for angle in USUAL_DEG),
        )
        for side in (1.0, -1.0)
        for start in starts
    ]


def _cell(fit: Fit, wanted_deg: float, reversed_: bool) -> Cell:
    wanted = signed(f"{wanted_deg:+g}°")
    try:
        one: Command = command_for(fit, wanted_deg, after_reversal=reversed_)
    except CalibError:
        return Cell(wanted=wanted, said="not driven, so not known")
    value, low, high = map(signed, with_u(one.wheel_deg, sign=True))
    half = 0.5 * (one.high_deg - one.low_deg)
    return Cell(
        wanted=wanted, wheel=value, low=low, high=high, lands=f"±{two_digits(half)}°", extrapolated=one.extrapolated
    )


def any_extrapolated(subject: Subject) -> str:
    """Return what the mark of an extrapolation means; empty where there is none."""
    cells = [cell for side in sides_of(subject, every_start=True) for cell in side.cells]
    if subject.result is None or not any(cell.extrapolated for cell in cells):
        return ""
    low, high = subject.result.fit.tried_wheel_deg
    driven = f"{low:g} wheel degrees were" if low == high else f"{low:g} to {high:g} wheel degrees were"
    return f"* Extrapolated: only commands of {driven} tried."


def reservations(subject: Subject, missing: Sequence[tuple[str, str]] = ()) -> list[Markup]:
    """Return what spoils confidence, a sentence each; empty if nothing was found.

    Parameters
    ----------
    subject : Subject
    missing : sequence of (clip, reason)
        Clips without pictures.
    """
    return [
        *_warned(subject),
        *_flagged(subject),
        *_events(subject),
        *_out_of_fit(subject),
        *(_of_fit(subject.result) if subject.result else []),
        *(Markup("{}").format(one) for one in consistency_words(subject) if one.startswith("Seen")),
        *(Markup("{}: {}.").format(named(clip), reason) for clip, reason in missing),
        *([Markup("{}.").format(sentence_case(subject.fit_note))] if subject.fit_note else []),
    ]


def consistency_words(subject: Subject) -> list[str]:
    """Return what the turns say of their consistency, a sentence each."""
    if subject.consistency is None:
        return []
    return [signed(visible(one)).replace("%", "\u00a0%") for one in consistency_sentences(subject.consistency)]


def sentence_case(text: str) -> str:
    """Return text with a capital at its start."""
    return text[:1].upper() + text[1:]


def _warned(subject: Subject) -> Iterable[Markup]:
    for one in subject.measurements:
        for warning in one.warnings:
            yield Markup("{}: {}.").format(named(one.name), visible(warning).rstrip("."))


def _flagged(subject: Subject) -> Iterable[Markup]:
    by_flag: dict[str, list[Seen]] = defaultdict(list)
    for one in subject.seen:
        for flag in one.turn.flags:
            by_flag[flag].append(one)
    for flag, turns in by_flag.items():
        yield Markup("Flagged {}: {}.").format(visible(flag).replace("_", " "), _listed(turns, subject))


def _events(subject: Subject) -> Iterable[Markup]:
    count: dict[str, int] = defaultdict(int)
    for one in subject.measurements:
        for event in one.events:
            count[event.kind] += 1
    if count:
        parts = ", ".join(f"{visible(kind)} ({n})" for kind, n in count.items())
        yield Markup("Besides turns there were: {}.").format(parts)


def _out_of_fit(subject: Subject) -> Iterable[Markup]:
    by_reason: dict[str, list[Seen]] = defaultdict(list)
    for one in subject.seen:
        if one.left_out:
            by_reason[one.left_out].append(one)
    for reason, turns in by_reason.items():
        if reason == UNKNOWN_SLACK:  # nothing is wrong with such a turn
            continue
        yield Markup("Not in the fit: {}, since {}.").format(_listed(turns, subject), signed(visible(reason)))
    far = [one for one in subject.seen if one.straggles]
    if far:
        yield Markup("Far out, but in the fit: {}.").format(_listed(far, subject))


def _listed(turns: Sequence[Seen], subject: Subject) -> Markup:
    """Return turns as links, with the clip where there are several."""
    several = len(subject.measurements) > 1
    link = Markup('<a href="#row-{}" data-turn="{}">{}</a>')
    shown = [
        link.format(one.key, one.key, Markup("{} of {}").format(one.turn.turn, named(one.clip, 24)))
        if several
        else link.format(one.key, one.key, one.turn.turn)
        for one in turns[:12]
    ]
    more = [] if len(turns) <= 12 else [Markup("{} more").format(len(turns) - 12)]
    return Markup("turn{} {}").format("" if len(turns) == 1 else "s", Markup(", ").join([*shown, *more]))


def _of_fit(result: FitResult) -> Iterable[Markup]:
    fit = result.fit
    for note in fit.notes:
        yield Markup("{}.").format(sentence_case(note))
    if fit.dof < FEW_DOF:
        scatter = fit.repeatability_deg()
        yield Markup(
            "Only {} degrees of freedom stand behind the scatter, so it is known no better than between {} and {} "
            "degrees; more repeats would narrow this."
        ).format(fit.dof, two_digits(scatter.low), two_digits(scatter.high))
    if fit.u_typical_deg > fit.scatter_deg:
        yield Markup("The pictures' own uncertainty is larger than the robot's scatter, which is therefore doubtful.")
    plain, robust = fit.gain(), fit.robust_gain()
    if robust is not None and abs(robust.value - plain.value) > 2.0 * plain.u > 0.0:
        yield Markup(
            "A fit that strays pull little at gives {:.4f} degrees per wheel degree instead of {:.4f}: a few turns "
            "decide."
        ).format(robust.value, plain.value)
