"""Measured folders to a comparison of surfaces, robots, or the values of a factor."""

from __future__ import annotations

import json
import math
from collections.abc import Iterable, Sequence
from dataclasses import replace
from pathlib import Path
from typing import Any

import numpy as np

from calib.compare import DIFFERENT, MARGIN_DEG, SAME, Comparison, Group, Pair, SpreadPair, compare_tables
from calib.fit import CONFIDENCE
from calib.intervals import Estimate
from calib.table import TurnTable
from floorswing.errors import FileError
from floorswing.files import plain, read_measurement
from floorswing.fitting import measured_folders, usable_turns
from floorswing.numbers import two_digits
from floorswing.records import Measurement
from floorswing.tables import table
from floorswing.turn_tables import table_of

KIND = "floorswing comparison"
FORMAT = 1


def compare(
    folders: str | Path | Iterable[str | Path],
    *,
    wanted_deg: Sequence[float] = (),
    margin_deg: float = MARGIN_DEG,
    by: str | None = None,
    confidence: float = CONFIDENCE,
) -> Comparison:
    """Compare measured folders with each other.

    Parameters
    ----------
    folders : path-like or iterable of them
        Each a folder that ``measure`` wrote for a clip, or one of such folders: the clips in it are runs of one thing,
        unless they are of different robots or floors.
    wanted_deg : sequence of float
        Signed angles at which they are compared; 90 degrees each way by default.
    margin_deg : float
        Difference of heading that does not matter.
    by : str, optional
        A further column of the commands files: its values are compared instead of the folders.
    confidence : float

    Raises
    ------
    FileError
        If a folder does not hold measurements, or there is no such column.
    calib.errors.CalibError
        If there are fewer than two things to compare, or one allows no fit.
    """
    listed = [Path(folders)] if isinstance(folders, str | Path) else [Path(folder) for folder in folders]
    twice = [folder for n, folder in enumerate(listed) if folder in listed[:n]]
    if twice:
        raise FileError(f"{twice[0]}: given twice; give each folder once")
    measured = [[read_measurement(clip) for clip in measured_folders([folder])] for folder in listed]
    tables = _by_column(measured, by) if by is not None else _by_folder(measured)
    found = compare_tables(tables, wanted_deg=wanted_deg, margin_deg=margin_deg, confidence=confidence)
    robots, floors = (len(set(names)) for names in zip(*(_kind(one) for part in measured for one in part), strict=True))
    if robots > 1 and floors > 1:
        both = "robots and floors both differ, so a difference between floors may be one between robots"
        return replace(found, notes=(*found.notes, both))
    return found


def _by_folder(measured: Sequence[Sequence[Measurement]]) -> list[tuple[str, TurnTable]]:
    """Return the turns of each folder, apart by robot and floor where it holds several."""
    parts: list[list[Measurement]] = []
    for clips in measured:
        kinds = dict.fromkeys(_kind(clip) for clip in clips)
        parts.extend([clip for clip in clips if _kind(clip) == kind] for kind in kinds)
    return list(zip(_names(parts), (_table(part) for part in parts), strict=True))


def _kind(one: Measurement) -> tuple[str, str]:
    return one.trial.robot.name, one.trial.floor.surface


def _names(parts: Sequence[Sequence[Measurement]]) -> list[str]:
    """Return the shortest names that tell the parts apart."""
    first = [part[0] for part in parts]
    folders = [one.folder or Path(one.name) for one in first]
    tried = [
        [one.trial.floor.surface for one in first],
        [one.trial.robot.name for one in first],
        [f"{one.trial.robot.name} on {one.trial.floor.surface}" for one in first],
        [(folder if len(part) == 1 else folder.parent).name for folder, part in zip(folders, parts, strict=True)],
        [str(folder) for folder in folders],
    ]
    return next((names for names in tried if len(set(names)) == len(names)), tried[-1])


def _table(part: Sequence[Measurement]) -> TurnTable:
    turns, used, _ = usable_turns(part)
    return table_of(part, turns, used)


def _by_column(measured: Sequence[Sequence[Measurement]], column: str) -> list[tuple[str, TurnTable]]:
    """Return the turns with each value of a factor."""
    clips = list({one.name: one for part in measured for one in part}.values())
    if len({_kind(clip) for clip in clips}) > 1:
        raise FileError(f"the folders are of different robots or floors; give those of one to compare by {column}")
    every = _table(clips)
    if column not in every.factors:
        known = ", ".join(every.factors) or "none"
        raise FileError(f"no column {column} in the turns; the commands files have further columns: {known}")
    values = np.array(every.factors[column])
    return [(f"{column} {value or 'blank'}", every.take(values == value)) for value in dict.fromkeys(values.tolist())]


def group_table(found: Comparison) -> str:
    """Return the table of what is compared."""
    rows = []
    for group in found.groups:
        gain, scatter = group.fit.gain(confidence=found.confidence), group.fit.repeatability_deg(found.confidence)
        rows.append(
            [
                group.name,
                str(group.fit.n_turns),
                str(group.n_runs),
                f"{gain.value:.4f} [{gain.low:.4f}, {gain.high:.4f}]",
                f"{scatter.value:.2f} [{scatter.low:.2f}, {scatter.high:.2f}]",
            ]
        )
    return table(["", "turns", "runs", "gain, deg per wheel deg", "repeatability, deg"], rows)


def pair_table(found: Comparison) -> str:
    """Return the table of pairs."""
    rows = [
        [
            f"{pair.second} against {pair.first}",
            f"{pair.wanted_deg:+g}",
            f"{pair.heading_deg.value:+.2f} [{pair.heading_deg.low:+.2f}, {pair.heading_deg.high:+.2f}]",
            _command_cell(pair.command_wheel_deg),
            pair.verdict,
        ]
        for pair in found.pairs
    ]
    return table(["", "at, deg", "heading, deg", "command, wheel deg", "verdict"], rows)


def _command_cell(one: Estimate) -> str:
    return f"{one.value:+.1f} [{one.low:+.1f}, {one.high:+.1f}]"


def comparison_sentences(found: Comparison) -> list[str]:
    """Return in plain sentences what a comparison says, and what to do."""
    said = [_pair_sentence(pair, found) for pair in found.pairs]
    said.extend(_together_sentences(found))
    said.extend(_spread_sentence(spread, found.level) for spread in found.spreads)
    said.extend(f"Note: {note}." for note in found.notes)
    return said


def _pair_sentence(pair: Pair, found: Comparison) -> str:
    first, second = pair.commands_wheel_deg
    head = f"{pair.second} against {pair.first} at {pair.wanted_deg:+g} degrees: {pair.verdict}"
    apart = f"{abs(pair.heading_deg.value):.2f} degrees apart"
    if pair.verdict == SAME:
        why = f"{apart}, margin {found.margin_deg:g}, p = {pair.p_same:.2g}"
        return f"{head} ({why}); the command {first:+.1f} serves both."
    if pair.verdict == DIFFERENT:
        return (
            f"{head}, by {pair.heading_deg.value:+.2f} degrees (p = {pair.p_different:.2g}); "
            f"command {second:+.1f} on {pair.second} where {first:+.1f} serves on {pair.first}."
        )
    low, high = pair.heading_deg.low, pair.heading_deg.high
    within = f"the difference lies between {low:+.2f} and {high:+.2f} degrees, the margin is {found.margin_deg:g}"
    if pair.more is None:
        return f"{head}: {within}; no number of {pair.more_of} worth driving would settle it, so widen the margin."
    return (
        f"{head}: {within}; about {pair.more} more {pair.more_of} of each would tell (4 times in 5), "
        "if the difference is as it looks."
    )


def _together_sentences(found: Comparison) -> list[str]:
    return [
        f"All {len(found.groups)} together at {one.wanted_deg:+g} degrees: "
        + (f"not all alike (Welch's F = {one.f:.3g}, p = {one.p_value:.2g})." if one.p_value <= found.level
           else f"no difference seen (Welch's F = {one.f:.3g}, p = {one.p_value:.2g}).")
        for one in found.together
        if math.isfinite(one.p_value)
    ]  # fmt: skip


def _spread_sentence(spread: SpreadPair, level: float) -> str:
    head = f"Spread of {spread.second} against {spread.first}"
    if not math.isfinite(spread.ratio.value):
        return f"{head}: cannot be compared, since one of them does not scatter."
    ratio = (
        f"{two_digits(spread.ratio.value)} times as large (between {two_digits(spread.ratio.low)} and "
        f"{two_digits(spread.ratio.high)})"
    )
    robust = spread.p_brown_forsythe
    p = f"F test p = {spread.p_f:.2g}, Brown-Forsythe p = {robust:.2g}"
    if spread.p_f <= level and robust <= level:
        return f"{head}: {ratio}; different ({p})."
    if spread.p_f <= level:
        return f"{head}: {ratio}; different by the F test only ({p}), so a few far turns may make it."
    return f"{head}: {ratio}; no difference seen ({p})."


def comparison_json(found: Comparison) -> str:
    """Return a comparison as JSON."""
    document: dict[str, Any] = {
        "kind": KIND,
        "format": FORMAT,
        "margin_deg": found.margin_deg,
        "level": found.level,
        "confidence": found.confidence,
        "groups": [_group_document(group, found.confidence) for group in found.groups],
        "pairs": [plain(pair) for pair in found.pairs],
        "spreads": [plain(spread) for spread in found.spreads],
        "spread_together": {"f": found.spread_together[0], "p_value": found.spread_together[1]},
        "together": [plain(one) for one in found.together],
        "notes": list(found.notes),
    }
    return json.dumps(plain(document), indent=2, ensure_ascii=False, allow_nan=False) + "\n"


def _group_document(group: Group, confidence: float) -> dict[str, Any]:
    return {
        "name": group.name,
        "n_turns": group.fit.n_turns,
        "n_runs": group.n_runs,
        "gain_deg_per_wheel_deg": plain(group.fit.gain(confidence=confidence)),
        "repeatability_deg": plain(group.fit.repeatability_deg(confidence)),
        "between_runs_deg": group.between_deg,
    }
