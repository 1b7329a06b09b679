"""The main job on the bundled clips: measure, compare with the truth, fit, and say what to command."""

from __future__ import annotations

from dataclasses import dataclass
from pathlib import Path

from floorswing.demo_clips import DemoClip
from floorswing.errors import FileError
from floorswing.measuring import Progress, measure
from floorswing.numbers import two_digits
from floorswing.records import Measurement
from floorswing.truth import TruthCheck, check_against, read_truth


@dataclass(frozen=True, eq=False, kw_only=True, slots=True)
class DemoResult:
    """What became of one bundled clip."""

    measurement: Measurement
    check: TruthCheck


def measure_demo(clip: DemoClip, out: Path, progress: Progress | None = None) -> DemoResult:
    """Measure a bundled clip into `out` and compare it with its truth."""
    (measurement,) = measure(clip.clip, clip.trial, out, progress=progress)
    return DemoResult(measurement=measurement, check=check_against(measurement.turns, read_truth(clip.truth)))


def new_folder(out: Path, *, overwrite: bool) -> Path:
    """Return the folder to write into; refuse one with something in it unless told otherwise."""
    if not overwrite and out.exists() and (not out.is_dir() or any(out.iterdir())):
        raise FileError(
            f"{out}: is there already; use --overwrite to replace what the demo wrote, or another --out"
        )
    return out


def truth_sentence(check: TruthCheck) -> str:
    """Return in one sentence how a measurement compares with the truth."""
    found = f"{check.n_found} of {check.n_true} turns found"
    invented = "none invented" if check.n_invented == 0 else f"{check.n_invented} invented"
    if check.n_found == 0:
        return f"Against the truth: {found}, {invented}."
    rms, worst = two_digits(check.rms_deg), two_digits(check.worst_deg)
    return (
        f"Against the truth: {found}, {invented}, {check.n_right_command} with the right command; "
        f"heading changes off by {rms} degrees (root mean square), {worst} at most; "
        f"{check.n_within} of {check.n_found} within their stated 95 % interval."
    )
