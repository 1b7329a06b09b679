"""A plan as a run card, in words, as JSON, and as the commands of a trial file."""

from __future__ import annotations

import json
import math
import re
from collections.abc import Iterable, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any

from calib.errors import CalibError
from calib.fit import Fit, fit_turns
from calib.order import QUANTITIES
from calib.plan import Missing, Plan, Wanted, make_plan, missing_after, needs_of
from calib.turns import Turns
from floorswing.errors import FileError
from floorswing.files import plain, read_measurement
from floorswing.fitting import measured_folders, usable_turns
from floorswing.new_trial import as_toml
from floorswing.numbers import two_digits
from floorswing.tables import table
from floorswing.trial import read_trial, trial_from_text
from floorswing.writing import write_whole

KIND = "floorswing plan"
FORMAT = 1
MOST_SIZES = 12


@dataclass(frozen=True, eq=False, kw_only=True, slots=True)
class FirstBatch:
    """What was driven already: its usable turns, and the fit to them if there is one."""

    turns: Turns
    fit: Fit | None
    why_no_fit: str


@dataclass(frozen=True, eq=False, kw_only=True, slots=True)
class Planned:
    """A plan and where it stands.

    Parameters
    ----------
    plan : Plan or None
        None where nothing is missing.
    scatter_deg : float or None
        Expected scatter of single turns.
    scatter_from : str
        Where it comes from.
    missing : tuple of Missing
        Every combination, with what it has; empty without a first batch.
    repeats : int
        Repeats of every combination in all.
    needs : tuple of (str, int)
        Each wish and the repeats it takes.
    """

    plan: Plan | None
    scatter_deg: float | None
    scatter_from: str
    missing: tuple[Missing, ...]
    repeats: int
    needs: tuple[tuple[str, int], ...]


def read_first_batch(folders: Iterable[str | Path]) -> FirstBatch:
    """Read what was driven already.

    Raises
    ------
    FileError
        If a folder does not hold measurements.
    """
    turns, _, _ = usable_turns([read_measurement(folder) for folder in measured_folders(list(folders))])
    try:
        return FirstBatch(turns=turns, fit=fit_turns(turns), why_no_fit="")
    except CalibError as error:
        return FirstBatch(turns=turns, fit=None, why_no_fit=str(error))


def plan(
    sizes_wheel_deg: Sequence[float],
    wanted: Wanted | None = None,
    *,
    scatter_deg: float | None = None,
    after: FirstBatch | None = None,
    repeats: int | None = None,
    seed: int = 0,
) -> Planned:
    """Plan a trial.

    Parameters
    ----------
    sizes_wheel_deg : sequence of float
        Sizes of the commands; signs do not matter, since both directions are planned. Those of the first batch by
        default.
    wanted : Wanted, optional
    scatter_deg : float, optional
        Expected scatter of single turns; that of the first batch by default.
    after : FirstBatch, optional
        What was driven already: only what is missing is planned.
    repeats : int, optional
        Of each combination, instead of what `wanted` takes.
    seed : int

    Raises
    ------
    CalibError
        If something that is needed is not known, or the plan would be too long.
    """
    sizes = tuple(sorted({abs(size) for size in sizes_wheel_deg}))
    if not sizes and after is not None:
        sizes = tuple(sorted({abs(size) for size in after.turns.wheel_deg.tolist()}))
    if not sizes:
        raise CalibError("no command to plan: give --wheel-deg, or a trial file or a first batch that has some")
    if len(sizes) > MOST_SIZES:
        raise CalibError(f"{len(sizes)} sizes of command; at most {MOST_SIZES} can be planned, so give --wheel-deg")
    scatter, source = _scatter(scatter_deg, after)
    if scatter is None and source and (wanted or Wanted()).needs_scatter:
        raise CalibError(f"the scatter of single turns is not known, since {source}; give --scatter-deg")
    needs = needs_of(wanted or Wanted(), len(sizes), scatter)
    full = make_plan(sizes, needs, repeats=repeats, seed=seed)
    missing = missing_after(after.turns, sizes, full.repeats) if after is not None else ()
    more = max((one.missing for one in missing), default=full.repeats)
    return Planned(
        plan=None if more == 0 else full if more == full.repeats else make_plan(sizes, needs, repeats=more, seed=seed),
        scatter_deg=scatter,
        scatter_from=source,
        missing=missing,
        repeats=full.repeats,
        needs=tuple((need.what, need.repeats) for need in needs),
    )


def _scatter(given: float | None, after: FirstBatch | None) -> tuple[float | None, str]:
    if given is not None:
        return given, "as given"
    if after is None:
        return None, ""
    if after.fit is None:
        return None, f"the first batch does not tell it ({after.why_no_fit})"
    return after.fit.scatter_deg, "seen in the first batch"


def run_card(planned: Plan) -> str:
    """Return the run card: a line a turn, with a box to tick."""
    words = {1.0: "counter-clockwise", -1.0: "clockwise"}
    rows = []
    for n, (wheel, back, block) in enumerate(_lines(planned), start=1):
        start = "any" if math.isnan(back) else "reversed" if back else "same way"
        direction = words[math.copysign(1.0, wheel)]
        rows.append([f"{n}", f"{wheel:+g}", direction, start, str(block) if block else "-", "[ ]"])
    return table(["turn", "wheel deg", "direction", "start", "block", "done"], rows)


def _lines(planned: Plan) -> list[tuple[float, float, int]]:
    order = planned.order
    return list(zip(order.wheel_deg.tolist(), order.reversed_.tolist(), order.block, strict=True))


def missing_table(missing: Sequence[Missing]) -> str:
    """Return what was driven and what is missing, a line a combination."""
    rows = [
        [f"{one.wheel_deg:+g}", "reversed" if one.after_reversal else "same way", str(one.have), str(one.missing)]
        for one in missing
    ]
    return table(["command", "start", "driven", "missing"], rows)


def plan_sentences(found: Planned) -> list[str]:
    """Return in plain sentences what is planned and why."""
    said = [f"For the {what}: {repeats} repeats of each combination." for what, repeats in found.needs]
    if found.scatter_deg is not None and found.needs:
        scatter = two_digits(found.scatter_deg)
        said.append(f"Single turns are taken to scatter by {scatter} degrees ({found.scatter_from}).")
    if found.plan is None:
        said.append(f"Nothing is missing: every combination was driven {found.repeats} times or more.")
        return said
    n = len(found.plan.order.wheel_deg)
    more = "more " if found.missing else ""
    said.append(
        f"{n} {more}turns: one to begin with, then {found.plan.repeats} {more}of every combination of direction, size "
        "and start (along or against the turn before), a block at a time."
    )
    said.append(_merit_sentence(found.plan))
    return said


def _merit_sentence(planned: Plan) -> str:
    times = planned.merit.d_efficiency
    if math.isinf(times):
        lost = [name for name, u in zip(QUANTITIES, planned.merit.u_other, strict=False) if math.isinf(u)]
        return f"The same turns, each command in a row, could not tell {' and '.join(lost) or 'them apart'} at all."
    return (
        f"Each command in a row instead would take {times:.1f} times as many turns to tell gains, dead band and drift "
        "as well (D-efficiency)."
    )


def merit_table(planned: Plan) -> str:
    """Return how well each quantity is told, against the naive order."""
    merit = planned.merit
    rows = [
        [name, _u(first), _u(second)]
        for name, first, second in zip(QUANTITIES, merit.u_planned, merit.u_other, strict=False)
    ]
    return table(["standard uncertainty, in scatters of a turn", "this order", "each command in a row"], rows)


def _u(value: float) -> str:
    return "cannot tell" if math.isinf(value) else f"{value:.2f}"


def write_planned_trial(trial: Path, out: Path, planned: Plan) -> Path:
    """Write a trial file that is another one with the planned commands in place of its own.

    Raises
    ------
    FileError, TrialError
        If the one cannot be read or the other not written.
    """
    read_trial(trial)
    text = with_commands(trial.read_text(encoding="utf-8-sig"), planned.order.wheel_deg.tolist())
    trial_from_text(text, out)
    return write_whole(out, text)


COMMANDS_TABLE = re.compile(r"^\[commands\][^\n]*\n(?:(?!\[[A-Za-z]).*\n?)*", flags=re.MULTILINE)
"""The table of commands: from its header to the next header or the end of the file."""


def with_commands(text: str, wheel_deg: Sequence[float]) -> str:
    """Return the text of a trial file with other commands."""
    block = f"[commands]\nwheel_deg = {as_toml(tuple(wheel_deg))}\n"
    if not COMMANDS_TABLE.search(text):
        return f"{text.rstrip()}\n\n{block}"
    before, after = COMMANDS_TABLE.split(text, maxsplit=1)
    return before + block + (f"\n{after}" if after.strip() else "")


def sizes_of_trial(trial: Path) -> tuple[float, ...]:
    """Return the sizes of the commands in a trial file."""
    return tuple(sorted({abs(size) for size in read_trial(trial).commands.wheel_deg}))


def plan_json(found: Planned) -> str:
    """Return a plan as JSON."""
    document: dict[str, Any] = {
        "kind": KIND,
        "format": FORMAT,
        "needs": [{"what": what, "repeats": repeats} for what, repeats in found.needs],
        "scatter_deg": found.scatter_deg,
        "repeats": found.repeats,
        "combinations": [plain(one) for one in found.missing],
        "turns": [],
    }
    if found.plan is not None:
        merit = found.plan.merit
        document |= {
            "seed": found.plan.order.seed,
            "turns": [
                {"wheel_deg": wheel, "after_reversal": None if math.isnan(back) else bool(back), "block": block}
                for wheel, back, block in _lines(found.plan)
            ],
            "d_efficiency": merit.d_efficiency,
            "u_in_scatters": {
                name: {"this_order": first, "each_command_in_a_row": second}
                for name, first, second in zip(QUANTITIES, merit.u_planned, merit.u_other, strict=False)
            },
        }
    return json.dumps(plain(document), indent=2, ensure_ascii=False, allow_nan=False) + "\n"


def check_out(trial: Path | None, out: Path | None) -> None:
    """Refuse to write commands without knowing the rest of the trial."""
    if out is not None and trial is None:
        raise FileError(f"{out}: a trial file needs robot and floor; give --trial FILE to take them from")
