"""Clips as phones and rooms make them: ``python -m bench.robustness [--only NAME ...] [--cache DIR]``.

Each row of `demo_videos.render.mishaps` is rendered, damaged if its row says so, and measured through the command's own
functions. One line a row is printed as a Markdown table: true turns, how many of them were found, missed and invented,
the RMS and the largest error of the turns that count, and what was said: flags, events, warnings or the refusal.

A row passes if nothing was invented, nothing was missed that was not reported, the turns that count are right, and
everything was said that its row expects. Clips in the cache folder are used again; empty it after a change to the
renderer. ``--results FILE`` keeps what was measured, row by row, so that the table can be printed in several runs.
"""

from __future__ import annotations

import argparse
import json
import math
import tempfile
import time
from collections.abc import Sequence
from dataclasses import asdict, dataclass, field
from pathlib import Path

import numpy as np

from demo_videos.render.clip import Truth, render_clip, truth_of
from demo_videos.render.mishaps import damage_file, robustness_rows
from demo_videos.render.motion import TurnTruth
from demo_videos.render.rows import Row
from floorswing.errors import FloorswingError
from floorswing.fitting import NOT_COUNTED
from floorswing.measuring import measure
from floorswing.records import MeasuredTurn, Measurement
from vision.errors import VisionError

ASKED_RMS_DEG = 0.1
"""Asked of the turns that count, wherever the markers can be read at both rests."""

ASKED_WORST_DEG = 0.5
"""A turn that counts and errs by more than this is wrong, however the others are."""

SAME_EVENT = {"hidden": ("hidden", "handled"), "two pushes": ("two_pushes",), "uncommanded turn": ("extra",)}
"""Flags or kinds of events by which a happening of the truth is told, where they differ from its own name."""


@dataclass(frozen=True, kw_only=True)
class Verdict:
    """What one row of the table says."""

    name: str
    what: str
    n_true: int
    n_found: int = 0
    n_told: int = 0
    """True turns that were not measured, but reported: an event covers them, or the clip had ended."""
    n_missed: int = 0
    n_invented: int = 0
    n_counted: int = 0
    rms_deg: float = math.nan
    worst_deg: float = math.nan
    worst_z: float = math.nan
    said: list[str] = field(default_factory=list)
    faults: list[str] = field(default_factory=list)
    """Why the row does not pass; empty if it does."""
    seconds: float = 0.0


def clip_of(row: Row, cache: Path) -> Path:
    """Return the row's clip, rendered and damaged unless it is there already."""
    path = cache / f"{row.name}{row.suffix}"
    if not path.exists():
        part = cache / f"part-{row.name}{row.suffix}"
        render_clip(row.scene, row.motion, part, **row.storage)
        Path(f"{part}.truth.json").unlink()
        damage_file(part, row)
        part.replace(path)
    return path


def write_trial(row: Row, truth: Truth, path: Path) -> Path:
    """Write the trial file that somebody would write for the row's clip."""
    robot, commands = row.scene.robot, truth.commands[: row.command_count]
    path.write_text(
        f'[robot]\nname = "shuttle"\nwheel_diameter_mm = {robot.wheel_diameter_mm}\n'
        f"marker_side_mm = {robot.marker_side_mm}\n\n"
        f'[markers]\ndictionary = "{robot.dictionary}"\n\n'
        f'[floor]\nsurface = "{row.scene.floor.kind}"\ncard_side_mm = 60.0\n\n'
        f"[commands]\nwheel_deg = {list(commands)}\n",
        encoding="utf-8",
    )
    return path


def judge(row: Row, cache: Path, folder: Path) -> Verdict:
    """Measure the row's clip and hold the result against its truth."""
    truth = truth_of(row.scene, row.motion)
    trial = write_trial(row, truth, folder / "trial.toml")
    clip = clip_of(row, cache)
    start = time.monotonic()
    try:
        measured = measure(clip, trial, folder / "out")[0]
    except (VisionError, FloorswingError, ValueError) as error:
        return refused(row, truth, str(error), time.monotonic() - start)
    return compared(row, truth, measured, time.monotonic() - start)


def refused(row: Row, truth: Truth, message: str, seconds: float) -> Verdict:
    """Return the verdict on a clip that could not be measured."""
    right = row.refusal is not None and row.refusal in message
    faults = [] if right else [f"refused, expected {row.refusal!r}" if row.refusal else "refused"]
    return Verdict(
        name=row.name,
        what=row.what,
        n_true=len(truth.turns),
        n_told=len(truth.turns),
        said=[f"refused: {message}"],
        faults=faults,
        seconds=seconds,
    )


def compared(row: Row, truth: Truth, measured: Measurement, seconds: float) -> Verdict:
    """Return the verdict on a clip that was measured."""
    pairs, invented = paired(measured.turns, truth.turns)
    found = [(turn, true) for turn, true in pairs if math.isfinite(turn.heading_change_deg)]
    lost = [true for true in truth.turns if all(true is not other for _, other in pairs)]
    told = [true for true in lost if was_told(true, measured)]
    half = [turn for turn, _ in pairs if not math.isfinite(turn.heading_change_deg)]
    counted = [(turn, true) for turn, true in found if not NOT_COUNTED.keys() & set(turn.flags)]
    errors = np.array([turn.heading_change_deg - true.heading_change_deg for turn, true in counted])
    z = np.array([abs(e) / turn.u_heading_change_deg for e, (turn, _) in zip(errors, counted, strict=True)])
    verdict = Verdict(
        name=row.name,
        what=row.what,
        n_true=len(truth.turns),
        n_found=len(found),
        n_told=len(told) + len(half),
        n_missed=len(lost) - len(told),
        n_invented=len(invented),
        n_counted=len(counted),
        rms_deg=float(np.sqrt(np.mean(errors**2))) if len(errors) else math.nan,
        worst_deg=float(np.abs(errors).max()) if len(errors) else math.nan,
        worst_z=float(z.max()) if len(z) else math.nan,
        said=things_said(measured),
        seconds=seconds,
    )
    return Verdict(**{**asdict(verdict), "faults": faults_of(row, verdict, counted, truth)})


def paired(
    turns: Sequence[MeasuredTurn], truth: Sequence[TurnTruth]
) -> tuple[list[tuple[MeasuredTurn, TurnTruth]], list[MeasuredTurn]]:
    """Return measured turns with the true turn that each overlaps most, and those that overlap none."""
    pairs: list[tuple[MeasuredTurn, TurnTruth]] = []
    invented: list[MeasuredTurn] = []
    free = list(truth)
    for turn in turns:
        best = max(free, key=lambda true: overlap_s(turn, true), default=None)
        if best is None or overlap_s(turn, best) <= 0.0:
            invented.append(turn)
        else:
            pairs.append((turn, best))
            free.remove(best)
    return pairs, invented


def overlap_s(turn: MeasuredTurn, true: TurnTruth) -> float:
    return min(turn.end_s, true.end_s) - max(turn.start_s, true.start_s)


def was_told(true: TurnTruth, measured: Measurement) -> bool:
    """Return whether a true turn without a measured one was reported: an event over it, or no picture any more."""
    end_s = float(measured.track.time_s[-1]) if measured.track is not None else math.inf
    kinds = ("hidden", "handled", "driven", "camera moved")
    over = any(e.kind in kinds and e.start_s < true.end_s and e.end_s > true.start_s for e in measured.events)
    return over or (true.end_s > end_s and any("nothing could be read" in w for w in measured.warnings))


def things_said(measured: Measurement) -> list[str]:
    """Return flags (with the turns that bear them), events and warnings."""
    flags = sorted({flag for turn in measured.turns for flag in turn.flags})
    said = [f"flag {flag} ({sum(flag in turn.flags for turn in measured.turns)})" for flag in flags]
    kinds = sorted({event.kind for event in measured.events})
    said += [f"event {kind} ({sum(event.kind == kind for event in measured.events)})" for kind in kinds]
    return [*said, *measured.warnings]


def faults_of(row: Row, verdict: Verdict, counted: list[tuple[MeasuredTurn, TurnTruth]], truth: Truth) -> list[str]:
    """Return why a measured row does not pass."""
    faults = [f"not refused: {row.refusal}"] if row.refusal else []
    if verdict.n_missed:
        faults.append(f"{verdict.n_missed} missed")
    if verdict.n_invented:
        faults.append(f"{verdict.n_invented} invented")
    if verdict.rms_deg > ASKED_RMS_DEG and row.readable:
        faults.append("RMS")
    if verdict.worst_deg > ASKED_WORST_DEG and verdict.worst_z > 3.0:
        faults.append("a turn that counts is wrong")
    right = [turn.commanded_wheel_deg == true.commanded_wheel_deg for turn, true in counted]
    if not all(right):
        faults.append(f"{len(right) - sum(right)} with the wrong command")
    if row.readable and verdict.n_counted < len(truth.turns) - row.not_counted:
        faults.append(f"only {verdict.n_counted} count")
    text = " | ".join(verdict.said)
    for kind in row.expected_events:
        words = [w for name in SAME_EVENT.get(kind, (kind,)) for w in (f"event {name} ", f"flag {name} ")]
        if not any(word in text for word in words):
            faults.append(f"{kind} not reported")
    faults += [f"not said: {phrase!r}" for phrase in row.expected_words if phrase not in text]
    if row.quiet and verdict.said:
        faults.append("said something about a clip in order")
    return faults


HEADER = (
    "| clip | what is unusual | turns | found | told | missed | invented | count | RMS deg | worst deg | said | right |"
    "\n| --- | --- | --: | --: | --: | --: | --: | --: | --: | --: | --- | --- |"
)


def line(verdict: Verdict, *, width: int = 150) -> str:
    """Return the row of the table."""
    shown = [number(verdict.rms_deg), number(verdict.worst_deg)]
    counts = [verdict.n_true, verdict.n_found, verdict.n_told, verdict.n_missed, verdict.n_invented, verdict.n_counted]
    said = "; ".join(text if len(text) <= width else text[: width - 3] + "..." for text in verdict.said)
    right = "yes" if not verdict.faults else "**no**: " + ", ".join(verdict.faults)
    cells = [f"`{verdict.name}`", verdict.what, *map(str, counts), *shown, said.replace("|", "/"), right]
    return "| " + " | ".join(cells) + " |"


def number(value: float) -> str:
    return f"{value:.3f}" if math.isfinite(value) else ""


def kept(path: Path | None) -> dict[str, Verdict]:
    """Return the verdicts of earlier runs."""
    if path is None or not path.exists():
        return {}
    lines = path.read_text(encoding="utf-8").splitlines()
    return {verdict.name: verdict for verdict in (Verdict(**json.loads(text)) for text in lines)}


def main() -> None:
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("--only", nargs="*", help="these rows alone")
    parser.add_argument("--cache", type=Path, help="folder that keeps the rendered clips; default: a temporary one")
    parser.add_argument("--results", type=Path, help="file that keeps the verdicts; rows in it are not measured again")
    parser.add_argument("--render-only", action="store_true", help="fill the cache and stop")
    options = parser.parse_args()
    rows = [row for row in robustness_rows() if not options.only or row.name in options.only]
    verdicts = kept(options.results)
    with tempfile.TemporaryDirectory() as temporary:
        cache = options.cache or Path(temporary)
        cache.mkdir(parents=True, exist_ok=True)
        if options.render_only:
            for row in rows:
                print(clip_of(row, cache), flush=True)
            return
        print(HEADER)
        done = [verdict_of(row, cache, verdicts, options.results) for row in rows]
    right = sum(not verdict.faults for verdict in done)
    print(
        f"\n{right} of {len(done)} rows right; turns missed {sum(v.n_missed for v in done)}, "
        f"invented {sum(v.n_invented for v in done)}"
    )


def verdict_of(row: Row, cache: Path, verdicts: dict[str, Verdict], results: Path | None) -> Verdict:
    """Return the kept verdict of a row, or measure it, and print its line."""
    verdict = verdicts.get(row.name)
    if verdict is None:
        with tempfile.TemporaryDirectory() as folder:
            verdict = judge(row, cache, Path(folder))
        if results is not None:
            with results.open("a", encoding="utf-8") as file:
                file.write(json.dumps(asdict(verdict)) + "\n")
    print(line(verdict), flush=True)
    return verdict


if __name__ == "__main__":
    main()
