"""A measurement as text: a short table and one sentence."""

from __future__ import annotations

import math
from collections import defaultdict
from collections.abc import Sequence

import numpy as np

from floorswing.matching import MISSING_TURN
from floorswing.numbers import decimals_for, two_digits
from floorswing.records import MeasuredTurn, Measurement

LONGEST_TABLE = 30
"""Turns shown; more than these are cut in the middle."""

COVERAGE = 2.0
"""Expanded uncertainty in standard uncertainties: about 95 % (JCGM 100:2008, 6.3.3)."""

HEADER = ("turn", "start s", "wheel deg", "heading change deg", "flags")


def turns_table(turns: Sequence[MeasuredTurn]) -> str:
    """Return the turns as a table; uncertainties are expanded (twice the standard uncertainty)."""
    known_deg = [turn.u_heading_change_deg for turn in turns if turn.u_heading_change_deg > 0]
    decimals = decimals_for(COVERAGE * float(np.median(known_deg))) if known_deg else 3
    rows = [_row(turn, decimals) for turn in turns]
    if len(rows) > LONGEST_TABLE:
        half = LONGEST_TABLE // 2
        rows = [*rows[:half], ("...",) * (len(HEADER) - 1) + (f"{len(rows) - 2 * half} more",), *rows[-half:]]
    widths = [max(len(row[i]) for row in (HEADER, *rows)) for i in range(len(HEADER))]
    lines = []
    for row in (HEADER, *rows):
        cells = [cell.rjust(width) for cell, width in zip(row[:-1], widths[:-1], strict=True)]
        lines.append("  ".join([*cells, row[-1]]).rstrip())
    return "\n".join(lines)


def _row(turn: MeasuredTurn, decimals: int) -> tuple[str, ...]:
    commanded = turn.commanded_wheel_deg
    change, expanded = turn.heading_change_deg, COVERAGE * turn.u_heading_change_deg
    shown = "?" if math.isnan(change) else f"{change:+.{decimals}f}"
    uncertain = "?" if math.isnan(expanded) else f"{expanded:.{decimals}f}"
    return (
        str(turn.turn),
        f"{turn.start_s:.2f}",
        "" if math.isnan(commanded) else f"{commanded:+g}",
        f"{shown} ± {uncertain}",
        " ".join(turn.flags),
    )


def sentence(measurement: Measurement) -> str:
    """Return one plain sentence on what was measured, with numbers and their uncertainty."""
    turns = measurement.turns
    n_commands = len(measurement.trial.commands.wheel_deg)
    parts = [f"{_count(len(turns), 'turn')} seen{_matched_part(measurement, n_commands)}"]
    known_deg = [turn.u_heading_change_deg for turn in turns if math.isfinite(turn.u_heading_change_deg)]
    if known_deg:
        typical = two_digits(COVERAGE * float(np.median(known_deg)))
        parts.append(f"each heading change known to ±{typical} degrees (95 %, typical turn)")
    scatter = pooled_scatter_deg(turns)
    if scatter is not None:
        value_deg, dof = scatter
        parts.append(
            f"turns of the same command scatter by {two_digits(value_deg)} degrees"
            f" (standard deviation, {dof} degrees of freedom)"
        )
    return f"{measurement.name}: {'; '.join(parts)}."


def batch_table(failures: Sequence[tuple[str, str]], measured: Sequence[Measurement], n_kept: int) -> str:
    """Return what became of several clips: one line for all, then one for each, the failures first.

    Parameters
    ----------
    failures : sequence of (str, str)
        Name of each clip that failed, and why.
    measured : sequence of Measurement
        The others.
    n_kept : int
        How many of these were measured before.
    """
    kept = f" ({n_kept} of them before)" if n_kept else ""
    lines = [f"{_count(len(failures) + len(measured), 'clip')}: {len(failures)} failed, {len(measured)} measured{kept}"]
    names = [name for name, _ in failures] + [one.name for one in measured]
    width = max((len(name) for name in names), default=0)
    lines += [f"  {name:<{width}}  failed    {why}" for name, why in sorted(failures)]
    for one in sorted(measured, key=lambda one: one.name):
        n_matched = sum(not math.isnan(turn.commanded_wheel_deg) for turn in one.turns)
        matched = "" if n_matched == len(one.turns) else f", {n_matched} with a command"
        warned = f", {_count(len(one.warnings), 'warning')}" if one.warnings else ""
        lines.append(f"  {one.name:<{width}}  measured  {_count(len(one.turns), 'turn')}{matched}{warned}")
    return "\n".join(lines)


def _matched_part(measurement: Measurement, n_commands: int) -> str:
    n_matched = sum(not math.isnan(turn.commanded_wheel_deg) for turn in measurement.turns)
    if n_matched == len(measurement.turns) and not any(e.kind == MISSING_TURN for e in measurement.events):
        return ", each with its command"
    return f", {n_matched} of them matched to the {_count(n_commands, 'command')} of the trial"


def _count(number: int, noun: str) -> str:
    return f"{number} {noun}" + ("" if number == 1 else "s")


def pooled_scatter_deg(turns: Sequence[MeasuredTurn]) -> tuple[float, int] | None:
    """Return the standard deviation of turns about the mean of their command, and its degrees of freedom.

    None where no command was given twice.
    """
    groups: dict[float, list[float]] = defaultdict(list)
    for turn in turns:
        if math.isfinite(turn.commanded_wheel_deg) and math.isfinite(turn.heading_change_deg):
            groups[turn.commanded_wheel_deg].append(turn.heading_change_deg)
    dof = sum(len(group) - 1 for group in groups.values())
    if dof < 1:
        return None
    squares = sum(float(np.sum(np.square(np.subtract(group, np.mean(group))))) for group in groups.values())
    return math.sqrt(squares / dof), dof
