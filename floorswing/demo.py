"""Bundled clips measured, against their truth."""

from __future__ import annotations

from pathlib import Path

from floorswing.demo_clips import DemoClip
from floorswing.errors import FileError
from floorswing.files import read_measurement
from floorswing.numbers import two_digits
from floorswing.truth import TruthCheck, check_against, read_truth


def new_folder(out: Path, *, overwrite: bool) -> Path:
    """Return the folder to write into; refuse one with something in it unless told otherwise."""
    if not overwrite and out.exists() and (not out.is_dir() or any(out.iterdir())):
        raise FileError(f"{out}: is there already; use --overwrite to replace what the demo wrote, or another --out")
    return out


def check_demo(clip: DemoClip, out: Path) -> TruthCheck:
    """Compare what was measured in a bundled clip, and written to `out`, with its truth."""
    return check_against(read_measurement(out / clip.name).turns, read_truth(clip.truth))


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
