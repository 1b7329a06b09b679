"""A trial file, and clip results made up turn by turn, for tests of what happens after the pictures."""

from __future__ import annotations

import fcntl
import json
import subprocess
import sys
from collections.abc import Callable, Iterable
from dataclasses import dataclass
from pathlib import Path

import numpy as np
import pytest

from vision.records import ClipInfo, ClipResult, Contribution, Event, PoseTrack, Turn

TRIAL = """\
[robot]
name = "shuttle 2"
wheel_diameter_mm = 64.0
inner_track_mm = 118.0
tyre_width_mm = 20.0
marker_side_mm = 40.0

[markers]
dictionary = "APRILTAG_36h11"
fore = 0
aft = 1
cards = [10, 29]

[floor]
surface = "cork tile"
card_side_mm = 60.0

[commands]
wheel_deg = [190, 190, -190, -190]
"""


@pytest.fixture
def trial_file(tmp_path: Path) -> Path:
    path = tmp_path / "trial.toml"
    path.write_text(TRIAL, encoding="utf-8")
    return path


def turn(number: int, heading_change_deg: float, **changes: object) -> Turn:
    """Return the turn `number` (from 0): three seconds apart, one second long."""
    start_s = 2.0 + 3.0 * number
    values: dict[str, object] = {
        "start_s": start_s,
        "end_s": start_s + 1.0,
        "heading_change_deg": heading_change_deg,
        "u_heading_change_deg": 0.02,
        "start_heading_deg": 0.0,
        "end_heading_deg": heading_change_deg,
        "peak_rate_deg_s": 120.0,
        "overshoot_deg": 0.3,
        "settle_s": 0.2,
        "centre_x_mm": 4.0,
        "centre_y_mm": -2.0,
        "wander_mm": float("nan"),
    }
    return Turn(**{**values, **changes})  # type: ignore[arg-type]


def clip_result(changes_deg: Iterable[float], *, events: tuple[Event, ...] = ()) -> ClipResult:
    """Return what a clip with these turns would give."""
    turns = tuple(turn(number, change) for number, change in enumerate(changes_deg))
    time_s = np.arange(0.0, 4.0 + 3.0 * len(turns), 0.1)
    n = len(time_s)
    heading_deg = np.where(np.arange(n) % 7 == 3, np.nan, np.linspace(0.0, 90.0, n))
    return ClipResult(
        clip=ClipInfo(
            width_px=1920,
            height_px=1080,
            codec="h264",
            pixel_format="yuv420p",
            rotation_deg=0,
            mirrored=False,
            nominal_rate_hz=30.0,
            duration_s=float(time_s[-1]),
        ),
        track=PoseTrack(
            time_s=time_s,
            heading_deg=heading_deg,
            u_heading_deg=np.where(np.isnan(heading_deg), np.nan, 0.004),
            x_mm=np.zeros(n),
            y_mm=np.zeros(n),
            scale=np.ones(n),
            residual_px=np.full(n, 0.03),
            state=tuple("hidden" if np.isnan(h) else "rest" for h in heading_deg),
        ),
        turns=turns,
        events=events,
        plane={"tilt_deg": np.float64(12.5), "cards": {10: np.array([1.0, np.nan])}},
        budget=(
            Contribution(
                name="rest before",
                u_deg=0.014,
                evaluation="A",
                degrees_of_freedom=float("inf"),
                basis="scatter",
            ),
        ),
        warnings=("the light changed",),
    )


@dataclass(frozen=True)
class DemoRun:
    """A finished run of the demo: what it printed, and the folder that it wrote."""

    code: int
    stdout: str
    stderr: str
    folder: Path


@pytest.fixture(scope="session")
def demo_run(tmp_path_factory: pytest.TempPathFactory, worker_id: str) -> DemoRun:
    """Run the demo as a user would, once for all workers of a test run."""
    base = tmp_path_factory.getbasetemp()
    place = (base if worker_id == "master" else base.parent) / "demo-run"
    place.mkdir(exist_ok=True)
    said = place / "said.json"
    with (place / "lock").open("w") as lock:
        fcntl.flock(lock, fcntl.LOCK_EX)
        if not said.exists():
            command = [sys.executable, "-m", "floorswing", "demo"]
            result = subprocess.run(command, cwd=place, capture_output=True, text=True, timeout=400)
            said.write_text(json.dumps([result.returncode, result.stdout, result.stderr]))
    code, stdout, stderr = json.loads(said.read_text())
    return DemoRun(code=code, stdout=stdout, stderr=stderr, folder=place / "floorswing-demo")


Fake = Callable[..., None]


@pytest.fixture
def fake_pipeline(monkeypatch: pytest.MonkeyPatch) -> Fake:
    """Return a function that says what the pipeline gives (or raises) for clips of each name."""
    outcomes: dict[str, ClipResult | BaseException] = {}

    def measure_clip(
        path: Path, setup: object, *, progress: Callable[[float, float], None] | None = None, **_: object
    ) -> ClipResult:
        outcome = outcomes[Path(path).stem]
        if isinstance(outcome, BaseException):
            raise outcome
        if progress is not None:
            progress(5.0, 10.0)
            progress(10.0, 10.0)
        return outcome

    monkeypatch.setattr("floorswing.clip_job.measure_clip", measure_clip)

    def set_outcomes(**named: ClipResult | BaseException) -> None:
        outcomes.update(named)

    return set_outcomes


@pytest.fixture
def clip(tmp_path: Path) -> Callable[[str], Path]:
    """Return a function that makes a file for the fake pipeline to be called with."""

    def make(name: str) -> Path:
        path = tmp_path / name
        path.parent.mkdir(parents=True, exist_ok=True)
        path.write_bytes(b"not a real clip: " + name.encode())
        return path

    return make
