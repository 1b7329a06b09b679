"""Killed at any moment: ``python -m bench.killed [--times 100] [--seed 1]``.

``floorswing measure`` runs on two tiny clips into one folder and is killed (signal 9) after a random time, again and
again, mostly while it measures or writes. After each time every result in the folder must be whole: readable, with as
many rows as the whole result has, or absent. Now and then a run is left to end: it must succeed, its results be those
of a run that was never disturbed, and nothing of the killed ones be left over.
"""

from __future__ import annotations

import argparse
import os
import shutil
import signal
import subprocess
import sys
import tempfile
import time
from dataclasses import dataclass, field
from pathlib import Path

import numpy as np

from bench.fuzz import TRIAL, base_clips
from floorswing.errors import FloorswingError
from floorswing.files import read_measurement

COMPLETE_EVERY = 10
FILES = ("turns.csv", "events.csv", "heading.csv")
"""Tables whose content follows from the clip and the trial alone, to the last digit."""


@dataclass(kw_only=True)
class Tally:
    """What the kills hit, and what went wrong."""

    killed: int = 0
    ended_before: int = 0
    """Runs that had ended before they could be killed."""
    whole: int = 0
    """Results seen whole after a kill."""
    absent: int = 0
    completed: int = 0
    faults: list[str] = field(default_factory=list)


def started(clips: list[Path], trial: Path, out: Path) -> subprocess.Popen[bytes]:
    """Start a measurement in a process group of its own."""
    words = [sys.executable, "-m", "floorswing", "measure", *map(str, clips), "--trial", str(trial), "--out", str(out)]
    one_core = {**os.environ, "OMP_NUM_THREADS": "1"}
    pipes = {"stdout": subprocess.DEVNULL, "stderr": subprocess.PIPE}
    return subprocess.Popen(words, **pipes, start_new_session=True, env=one_core)


Tables = dict[str, list[str]]


def tables(folder: Path) -> Tables:
    """Return the lines of the tables of a result."""
    return {name: (folder / name).read_text().splitlines() for name in FILES}


def unlike(one: Tables, other: Tables) -> str | None:
    """Return where two results differ; None if nowhere."""
    for name in FILES:
        if len(one[name]) != len(other[name]):
            return f"{name}: {len(one[name])} lines, not {len(other[name])}"
        for number, (found, asked) in enumerate(zip(one[name], other[name], strict=True), start=1):
            if found != asked:
                return f"{name}, line {number}: {found}, not {asked}"
    return None


def check(out: Path, whole: dict[str, Tables], tally: Tally, when: str) -> None:
    """Look at every result in the folder: whole, or not there."""
    for name, asked in whole.items():
        folder = out / name
        if not folder.exists():
            tally.absent += 1
            continue
        try:
            measurement = read_measurement(folder)
            differs = unlike(tables(folder), asked)
            if differs is None and len(measurement.turns) != len(asked["turns.csv"]) - 1:
                differs = "turns are missing"
        except (FloorswingError, OSError) as error:
            tally.faults.append(f"{when}: {name}: {error}")
            continue
        tally.whole += differs is None
        if differs is not None:
            tally.faults.append(f"{when}: {name}: {differs}")


def left_over(out: Path) -> list[str]:
    return [str(path.relative_to(out)) for path in out.rglob("*") if path.name.startswith(".")]


def complete(clips: list[Path], trial: Path, out: Path) -> str | None:
    """Run to the end; return what went wrong."""
    process = started(clips, trial, out)
    _, said = process.communicate(timeout=300)
    ended = f"exit code {process.returncode}: {said.decode(errors='replace')[-300:]}"
    return None if process.returncode == 0 else ended


def run(times: int, seed: int, folder: Path) -> Tally:
    """Kill `times` runs and look at what is left."""
    tally, rng = Tally(), np.random.default_rng(seed)
    base_clips(folder)
    clips = [folder / "one.mp4", folder / "two.mkv"]
    shutil.copy(folder / "base.mp4", clips[0])
    shutil.copy(folder / "base.mkv", clips[1])
    trial, out = folder / "trial.toml", folder / "out"
    trial.write_text(TRIAL, encoding="utf-8")
    start = time.monotonic()
    wrong = complete(clips, trial, folder / "undisturbed")
    usual_s = time.monotonic() - start
    if wrong:
        raise SystemExit(f"the undisturbed run failed: {wrong}")
    whole = {clip.stem: tables(folder / "undisturbed" / clip.stem) for clip in clips}
    while tally.killed < times:
        process = started(clips, trial, out)
        time.sleep(float(rng.uniform(0.3, 1.05)) * usual_s)
        if process.poll() is None:
            os.killpg(process.pid, signal.SIGKILL)
            tally.killed += 1
        else:
            tally.ended_before += 1
        process.communicate()
        check(out, whole, tally, f"kill {tally.killed}")
        if (tally.killed + tally.ended_before) % COMPLETE_EVERY == 0:
            wrong = complete(clips, trial, out)
            tally.completed += wrong is None
            if wrong:
                tally.faults.append(f"after kill {tally.killed} the next run failed: {wrong}")
            check(out, whole, tally, f"completed after kill {tally.killed}")
            tally.faults += [f"left over: {name}" for name in left_over(out)]
        if rng.random() < 0.5:
            shutil.rmtree(out, ignore_errors=True)  # else the next run finds what is there
    return tally


def main() -> None:
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("--times", type=int, default=100, help="runs to kill (default 100)")
    parser.add_argument("--seed", type=int, default=1)
    options = parser.parse_args()
    with tempfile.TemporaryDirectory() as folder:
        tally = run(options.times, options.seed, Path(folder))
    print(
        f"killed {tally.killed} runs ({tally.ended_before} had ended before); results found whole {tally.whole}, "
        f"not yet there {tally.absent}; {tally.completed} runs completed after kills; faults {len(tally.faults)}"
    )
    for fault in tally.faults[:20]:
        print("  " + fault)
    sys.exit(1 if tally.faults else 0)


if __name__ == "__main__":
    main()
