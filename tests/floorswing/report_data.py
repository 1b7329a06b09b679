"""Measured folders with a clip of their own, drawn in seconds: two black squares turned about by a known law."""

from __future__ import annotations

import hashlib
import math
from collections.abc import Sequence
from dataclasses import replace
from fractions import Fraction
from pathlib import Path

import av
import cv2
import numpy as np

from floorswing.commands_file import Commands
from floorswing.files import write_measurement
from floorswing.records import ClipSource, MeasuredTurn, Measurement
from floorswing.trial import Floor, Markers, Robot, Trial
from vision.plane import N_GLOBAL, units_for
from vision.records import ClipInfo, Contribution, Event, PoseTrack
from vision.redraw import pair_px, redraw_record, view_from

SIZE_PX = (640, 480)
RATE_HZ = 10.0
REST_S, TURN_S = 0.5, 0.4
GAIN = 0.48
MARKER_MM, DISTANCE_MM = 40.0, 120.0
FRAME = (10.0, -30.0, 5.0)
HOSTILE = "</title><script>document.title='owned'</script><img src=x onerror=alert(1)> & \"quoted\" 'name'"
RIGHT_TO_LEFT = "\u202eרצפת שעם مطاط\u202c"


def redraw() -> dict[str, object]:
    """Return what redraws the pair: a tilted camera with a lens term."""
    p = np.zeros(N_GLOBAL)
    p[:13] = [0.42, 0.01, 0.40, 0.01, -0.04, -0.05, 0.0, 1.0, 0.02, -0.03, 1.0, 0.0, 0.0]
    return redraw_record(p, units_for(SIZE_PX, side_mm=MARKER_MM, length_mm=DISTANCE_MM), FRAME)


def heading_changes_deg(wheel_deg: Sequence[float], seed: int = 4, scatter_deg: float = 0.25) -> list[float]:
    """Return heading changes as the fit believes in them, with their scatter."""
    rng = np.random.default_rng(seed)
    return [GAIN * wheel + float(rng.normal(0.0, scatter_deg)) for wheel in wheel_deg]


def poses(changes_deg: Sequence[float]) -> tuple[np.ndarray, np.ndarray, list[str]]:
    """Return times, headings and states, frame by frame."""
    n_frames = round((len(changes_deg) * (REST_S + TURN_S) + REST_S) * RATE_HZ) + 1
    time_s = np.arange(n_frames) / RATE_HZ
    ends = np.concatenate([[20.0], 20.0 + np.cumsum(changes_deg)])
    heading, states = np.zeros(n_frames), []
    for k, now_s in enumerate(time_s):
        n, within_s = divmod(now_s + 1e-9, REST_S + TURN_S)
        n = min(int(n), len(changes_deg))
        turning = within_s > REST_S and n < len(changes_deg)
        share = (within_s - REST_S) / TURN_S if turning else 0.0
        heading[k] = ends[n] + (changes_deg[n] * (0.5 - 0.5 * math.cos(math.pi * share)) if turning else 0.0)
        states.append("turn" if turning else "rest")
    return time_s, heading, states


def write_clip(path: Path, time_s: np.ndarray, heading_deg: np.ndarray) -> None:
    """Write the clip: a mottled floor, a grey deck, two black squares where the view puts them."""
    view = view_from(redraw(), SIZE_PX)
    zeros = np.zeros(len(time_s))
    corners = pair_px(view, heading_deg, zeros, zeros)
    rng = np.random.default_rng(1)
    floor = cv2.GaussianBlur(rng.normal(120.0, 60.0, SIZE_PX[::-1]), (0, 0), 2.0)
    with av.open(str(path), "w") as container:
        options = {"crf": "20", "g": "10", "preset": "veryfast"}
        stream = container.add_stream("libx264", rate=int(RATE_HZ), options=options)
        stream.width, stream.height, stream.pix_fmt = *SIZE_PX, "yuv420p"
        for k, quads in enumerate(corners):
            picture = np.clip(floor + 60.0, 0, 255).astype(np.uint8)
            for quad in quads:
                around = quad.mean(axis=0) + 1.3 * (quad - quad.mean(axis=0))
                cv2.fillConvexPoly(picture, np.round(around * 16).astype(np.int32), (235,), cv2.LINE_AA, 4)
                cv2.fillConvexPoly(picture, np.round(quad * 16).astype(np.int32), (20,), cv2.LINE_AA, 4)
            frame = av.VideoFrame.from_ndarray(picture, format="gray").reformat(format="yuv420p")
            frame.pts, frame.time_base = k, Fraction(1, int(RATE_HZ))
            container.mux(stream.encode(frame))
        container.mux(stream.encode(None))


def write_folder(
    base: Path,
    name: str,
    wheel_deg: Sequence[float],
    *,
    robot: str = "shuttle 2",
    surface: str = "cork tile",
    flags: dict[int, tuple[str, ...]] | None = None,
    stray_deg: dict[int, float] | None = None,
    events: tuple[Event, ...] = (),
    warnings: tuple[str, ...] = (),
    factors: dict[str, str] | None = None,
    seed: int = 4,
    clip: bool = True,
) -> Path:
    """Write a clip and the folder that a measurement of it would give; return the folder."""
    changes = heading_changes_deg(wheel_deg, seed)
    for number, more_deg in (stray_deg or {}).items():
        changes[number - 1] += more_deg
    time_s, heading, states = poses(changes)
    base.mkdir(parents=True, exist_ok=True)
    path = base / f"{name}.mp4"
    if clip:
        write_clip(path, time_s, heading)
    digest = hashlib.sha256(path.read_bytes()).hexdigest() if clip else "0" * 64
    trial = Trial(
        path=base / f"{name}.toml",
        robot=Robot(name=robot, wheel_diameter_mm=64.0, marker_side_mm=40.0, inner_track_mm=118.0, tyre_width_mm=20.0),
        markers=Markers(),
        floor=Floor(surface=surface),
        commands=Commands(wheel_deg=tuple(wheel_deg)),
    )
    ends = np.concatenate([[20.0], 20.0 + np.cumsum(changes)])
    turns = [
        MeasuredTurn(
            turn=n + 1,
            start_s=n * (REST_S + TURN_S) + REST_S,
            end_s=(n + 1) * (REST_S + TURN_S),
            commanded_wheel_deg=wheel,
            heading_change_deg=changes[n],
            u_heading_change_deg=0.012,
            start_heading_deg=float(ends[n]),
            end_heading_deg=float(ends[n + 1]),
            peak_rate_deg_s=math.copysign(90.0, changes[n]),
            overshoot_deg=0.0,
            settle_s=0.05,
            centre_x_mm=0.1 * math.cos(n),
            centre_y_mm=0.1 * math.sin(n),
            wander_mm=0.02,
            flags=(flags or {}).get(n + 1, ()),
            factors=factors or {},
        )
        for n, wheel in enumerate(wheel_deg)
    ]
    n_frames = len(time_s)
    measurement = Measurement(
        name=name,
        folder=None,
        source=ClipSource(
            path=path,
            sha256=digest,
            info=ClipInfo(
                width_px=SIZE_PX[0], height_px=SIZE_PX[1], codec="h264", pixel_format="yuv420p", rotation_deg=0,
                mirrored=False, nominal_rate_hz=RATE_HZ, duration_s=float(time_s[-1]),
            ),
        ),
        trial=trial,
        turns=tuple(turns),
        events=events,
        track=PoseTrack(
            time_s=time_s, heading_deg=heading, u_heading_deg=np.full(n_frames, 0.004), x_mm=np.zeros(n_frames),
            y_mm=np.zeros(n_frames), scale=np.ones(n_frames), residual_px=np.full(n_frames, 0.03), state=tuple(states),
        ),
        plane={"method": "made up", "redraw": redraw()},
        budget=(
            Contribution(name="two rests", u_deg=0.01, evaluation="A", degrees_of_freedom=math.inf, basis="made up"),
            Contribution(name="plane map", u_deg=0.006, evaluation="A", degrees_of_freedom=50.0, basis="made up"),
        ),
        settings={"markers": {"dictionary": "APRILTAG_36h11"}},
        versions={"floorswing": "0.1.0"},
        warnings=warnings,
    )  # fmt: skip
    return replace(write_measurement(measurement, base / "out")).folder  # type: ignore[return-value]


def commands(n_turns: int, size: float = 187.5) -> list[float]:
    """Return commands in both directions, with and without reversals, in two sizes."""
    pattern = (size, size, -size, -size, 2 * size, -2 * size, -size, size)
    return [pattern[n % len(pattern)] for n in range(n_turns)]
