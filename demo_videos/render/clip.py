"""Encoded clips through PyAV, with the truth written beside them."""

from __future__ import annotations

import csv
import json
from dataclasses import asdict, dataclass
from fractions import Fraction
from pathlib import Path

import av
import numpy as np
from numpy.typing import NDArray

from demo_videos.render.frames import CodeImage, Renderer, frame_times
from demo_videos.render.motion import EventTruth, Motion, TurnTruth
from demo_videos.render.scene import Scene

ENCODERS = {
    "h264": "libx264",
    "hevc": "libx265",
    "vp9": "libvpx-vp9",
    "av1": "libsvtav1",
    "mjpeg": "mjpeg",
    "ffv1": "ffv1",
    "raw": "rawvideo",
}
TIME_BASE = Fraction(1, 90000)


@dataclass(frozen=True, eq=False, kw_only=True)
class Truth:
    """What really happened in a clip. Times count from the first frame."""

    turns: tuple[TurnTruth, ...]
    events: tuple[EventTruth, ...]
    commands: tuple[float, ...]
    frame_s: NDArray[np.float64]
    """Times of the frames, shape (N,)."""
    frame_heading_deg: NDArray[np.float64]
    """Heading at those times, shape (N,)."""

    def as_dict(self) -> dict[str, object]:
        """Return turns, events and commands, ready for JSON."""
        return {
            "turns": [{**asdict(turn), "heading_change_deg": turn.heading_change_deg} for turn in self.turns],
            "events": [asdict(event) for event in self.events],
            "commands": list(self.commands),
        }


def truth_of(scene: Scene, motion: Motion) -> Truth:
    """Return the truth of a clip without rendering it."""
    times = frame_times(scene.timing, motion, scene.seed)
    return Truth(
        turns=motion.turns,
        events=motion.events,
        commands=motion.commands,
        frame_s=times - times[0],
        frame_heading_deg=motion.heading_deg(times),
    )


def render_clip(
    scene: Scene,
    motion: Motion,
    path: str | Path,
    *,
    codec: str = "h264",
    bitrate: int | None = None,
    crf: float | None = None,
    preset: str | None = None,
    pix_fmt: str | None = None,
    gop: int = 30,
    rotation_deg: int = 0,
    options: dict[str, str] | None = None,
    frames_csv: bool = False,
) -> Truth:
    """Render and encode a clip, and write ``<clip>.truth.json`` beside it.

    Parameters
    ----------
    scene, motion
        What is filmed. With ``scene.sensor.bits == 10`` the stream has 10 bits.
    path
        Where to write; the ending chooses the container.
    codec
        One of ``h264``, ``hevc``, ``vp9``, ``av1``, ``mjpeg``, ``ffv1``, ``raw``.
    bitrate, crf
        Bits a second, or constant quality; the encoder's own default when both are None.
    preset, pix_fmt, gop, options
        Passed to the encoder; `gop` is the distance of key frames.
    rotation_deg
        Stored as a display-matrix flag (0, 90, 180, 270); the stored picture lies accordingly.
    frames_csv
        Also write ``<clip>.frames.csv`` with the heading at every frame.
    """
    path = Path(path)
    truth = truth_of(scene, motion)
    with av.open(str(path), "w") as container:
        stream = open_stream(container, scene, codec, bitrate, crf, preset, pix_fmt, gop, options)
        renderer = Renderer(scene)
        for index, time_s in enumerate(frame_times(scene.timing, motion, scene.seed)):
            luma = renderer.frame(float(time_s), motion)
            frame = video_frame(luma, stream.pix_fmt, scene.sensor.full_range)
            frame.time_base = TIME_BASE
            frame.pts = round((float(truth.frame_s[index]) + scene.timing.first_s) / TIME_BASE)
            container.mux(stream.encode(frame))
        container.mux(stream.encode(None))
    write_truth(path, truth, frames_csv)
    return truth


def open_stream(
    container: av.container.OutputContainer,
    scene: Scene,
    codec: str,
    bitrate: int | None,
    crf: float | None,
    preset: str | None,
    pix_fmt: str | None,
    gop: int,
    options: dict[str, str] | None,
) -> av.VideoStream:
    """Add the video stream with its settings."""
    settings = dict(options or {})
    if crf is not None:
        settings.setdefault("crf", str(crf))
    if preset is None and codec in ("h264", "hevc"):
        preset = "veryfast"
    if preset is not None:
        settings.setdefault("preset", preset)
    if codec == "hevc":
        settings.setdefault("x265-params", "log-level=error:pools=none:frame-threads=1")
    stream = container.add_stream(
        ENCODERS[codec], rate=Fraction(scene.timing.fps).limit_denominator(1001), options=settings
    )
    stream.width, stream.height = scene.camera.width_px, scene.camera.height_px
    stream.pix_fmt = pix_fmt or default_format(codec, scene)
    stream.codec_context.time_base = TIME_BASE
    stream.codec_context.color_range = 2 if scene.sensor.full_range else 1
    if bitrate is not None:
        stream.bit_rate = bitrate
    if codec in ("h264", "hevc", "vp9", "av1"):
        stream.codec_context.gop_size = gop
    return stream


def default_format(codec: str, scene: Scene) -> str:
    """Return the pixel format for a codec and a bit depth."""
    if scene.sensor.bits == 10:
        return "yuv420p10le"
    if codec == "mjpeg":
        return "yuvj420p"
    return "gray" if codec in ("ffv1", "raw") else "yuv420p"


def video_frame(luma: CodeImage, pix_fmt: str, full_range: bool) -> av.VideoFrame:
    """Return a frame whose luma plane holds the given code values, with neutral chroma."""
    height, width = luma.shape
    frame = av.VideoFrame(width, height, pix_fmt)
    frame.color_range = 2 if full_range else 1
    fill_plane(frame.planes[0], luma)
    neutral = 128 if luma.dtype == np.uint8 else 512
    for plane in frame.planes[1:]:
        fill_plane(plane, np.full((plane.height, plane.width), neutral, dtype=luma.dtype))
    return frame


def fill_plane(plane: av.video.plane.VideoPlane, values: CodeImage) -> None:
    """Copy code values into a plane, whose lines may be padded."""
    height, width = values.shape
    per_line = plane.line_size // values.dtype.itemsize
    padded = np.zeros((height, per_line), dtype=values.dtype)
    padded[:, :width] = values
    plane.update(padded.tobytes())


def write_truth(path: Path, truth: Truth, frames_csv: bool) -> None:
    """Write the truth beside a clip."""
    Path(f"{path}.truth.json").write_text(json.dumps(truth.as_dict(), indent=1) + "\n")
    if not frames_csv:
        return
    with open(f"{path}.frames.csv", "w", newline="") as file:
        rows = csv.writer(file)
        rows.writerow(["time_s", "heading_deg"])
        rows.writerows(
            [f"{time_s:.6f}", f"{heading:.6f}"]
            for time_s, heading in zip(truth.frame_s, truth.frame_heading_deg, strict=True)
        )
