"""The consistency of turns in words, tables and JSON."""

from __future__ import annotations

import math
from typing import Any

from calib.consistency import Cell, Check, Consistency
from calib.intervals import Estimate
from floorswing.files import plain
from floorswing.numbers import two_digits
from floorswing.tables import table

SEEN_LEVEL = 0.05
QUESTIONS = {
    "runs": "differences from run to run",
    "drift": "drift",
    "neighbours": "likeness of turns that follow each other",
    "grain": "grain of the floor",
    "slope of place": "a slope of the gain over the floor",
    "curve of place": "a bump of the gain over the floor",
    "direction": "a difference between the directions",
    "relation": "commands that lie off the fitted relation",
}
"""Each check by name, as a thing looked for."""


def looked_for(check: Check) -> str:
    """Return what a check looks for."""
    return QUESTIONS.get(check.name) or f"dependence on {check.name.removeprefix('factor ')}"


def consistency_table(found: Consistency) -> str:
    """Return the table of commands: count, mean, trueness, repeatability."""
    given = any(cell.wanted_is_given for cell in found.cells)
    starts = any(cell.after_reversal is not None for cell in found.cells)
    against = "off the wanted angle" if given else "off the relation"
    header = ["command", *(["start"] if starts else []), "turns", "mean, deg", f"{against}, deg", "repeatability, deg"]
    return table(header, [_row(cell, starts) for cell in found.cells])


def _row(cell: Cell, starts: bool) -> list[str]:
    start = {None: "any", True: "reversed", False: "same way"}[cell.after_reversal]
    return [
        f"{cell.wheel_deg:+g}",
        *([start] if starts else []),
        str(cell.n),
        f"{cell.mean_deg.value:+.2f}",
        _shown(cell.trueness_deg, "+z.2f"),
        "-" if cell.repeatability_deg is None else _shown(cell.repeatability_deg, ".2f"),
    ]


def _shown(one: Estimate, form: str) -> str:
    """Return a value with its interval, if that has bounds; without the sign of a zero."""
    texts = [f"{number:{form}}" for number in (one.value, one.low, one.high)]
    bounded = math.isfinite(one.low) and math.isfinite(one.high)
    return f"{texts[0]} [{texts[1]}, {texts[2]}]" if bounded else texts[0]


def consistency_sentences(found: Consistency) -> list[str]:
    """Return in plain sentences what was seen, what was looked for in vain, and what could not be told."""
    said = [_spread_sentence(found)]
    seen = found.seen(SEEN_LEVEL)
    said.extend(_seen_sentence(found, check) for check in seen)
    asked = [check for check in found.checks if not check.reason]
    unseen = [looked_for(check) for check in asked if check not in seen]
    if unseen:
        all_ = f"{len(asked)} questions together" if len(asked) > 1 else "one question"
        said.append(f"Looked for and not seen ({SEEN_LEVEL:.0%} over {all_}): {', '.join(unseen)}.")
    said.extend(f"Cannot be told: {looked_for(check)}, since {check.reason}." for check in found.checks if check.reason)
    return said


def _spread_sentence(found: Consistency) -> str:
    pooled = found.repeatability_deg
    if pooled is None:
        return "No command was repeated, so turns of one command cannot be held against each other."
    text = (
        f"Repeats of one command scatter by {two_digits(pooled.value)} degrees (standard deviation, between "
        f"{two_digits(pooled.low)} and {two_digits(pooled.high)}; {pooled.confidence:.0%})"
    )
    if found.runs is None:
        return f"{text}."
    between, total = found.runs.between, found.runs.reproducibility
    return (
        f"{text}; runs by {two_digits(between.value)} (between {two_digits(between.low)} and "
        f"{two_digits(between.high)}), so turns of different runs by {two_digits(total.value)} "
        f"(between {two_digits(total.low)} and {two_digits(total.high)})."
    )


def _seen_sentence(found: Consistency, check: Check) -> str:
    sure = f"(p = {check.p_adjusted:.2g}, adjusted)"
    what = _effect(found, check.name)
    return f"Seen {sure}: {looked_for(check)}{': ' if what else ''}{what}."


def _effect(found: Consistency, name: str) -> str:
    """Return how large what a check found is."""
    if name == "drift" and found.drift is not None:
        slope, long = found.drift.slope_deg, found.drift.turns_long
        return (
            f"{slope.value:+.3f} degrees a turn, along the command (between {slope.low:+.3f} and {slope.high:+.3f}), "
            f"{slope.value * long:+.1f} over a run of {long + 1} turns"
        )
    if name == "neighbours" and found.neighbours is not None:
        return f"correlation {found.neighbours.r1:+.2f}, in random order about {found.neighbours.expected:+.2f}"
    if name == "grain" and found.grain is not None:
        return "; ".join(
            f"the gain is {one.amplitude.value:.1%} higher (between {one.amplitude.low:.1%} and "
            f"{one.amplitude.high:.1%}) along {one.axis_deg.value:.0f} degrees of {_frame(one.frame)} (between "
            f"{one.axis_deg.low:.0f} and {one.axis_deg.high:.0f}) and as much lower across; at most "
            f"{one.largest_deg:.1f} degrees on a turn"
            for one in found.grain.frames
        )
    if name == "slope of place" and found.warp is not None:
        return "; ".join(
            f"the gain rises by {one.slope_per_m.value:.1%} a metre (between {one.slope_per_m.low:.1%} and "
            f"{one.slope_per_m.high:.1%}) towards {one.uphill_deg.value:.0f} degrees of {_frame(one.frame)}; at most "
            f"{one.largest_deg:.1f} degrees on a turn"
            for one in found.warp.frames
        )
    for factor in found.factors:
        if name == f"factor {factor.name}":
            return "; ".join(
                f"{label}, the gain changes by {one.value:+.2%} (between {one.low:+.2%} and {one.high:+.2%})"
                for label, one in factor.effects
            )
    return ""


def _frame(name: str) -> str:
    return f"the floor frame of {name}" if name else "the floor frame"


def consistency_document(found: Consistency) -> dict[str, Any]:
    """Return what ``fit.json`` holds of the consistency."""
    drift, grain, warp = found.drift, found.grain, found.warp
    return {
        "size_deg": found.size_deg,
        "repeatability_deg": plain(found.repeatability_deg),
        "commands": [plain(cell) for cell in found.cells],
        "runs": plain(found.runs),
        "drift": None if drift is None else plain(drift),
        "neighbours": plain(found.neighbours),
        "grain": None if grain is None else plain(grain.frames),
        "place": None if warp is None else plain(warp.frames),
        "factors": [
            {"name": one.name, "effects": [{"of": label, **plain(effect)} for label, effect in one.effects]}
            for one in found.factors
        ],
        "checks": [{**plain(check), "seen": bool(check.p_adjusted <= SEEN_LEVEL)} for check in found.checks],
    }
