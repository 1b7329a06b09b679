"""Encoded clips through PyAV, with the truth written beside them."""

from __future__ import annotations

import csv
import json
from collections.abc import Iterator, Sequence
from dataclasses import asdict, dataclass, field, replace
from fractions import Fraction
from pathlib import Path
from typing import TypedDict, Unpack

import av
import numpy as np
from numpy.typing import NDArray

from demo_videos.render.colours import Colours
from demo_videos.render.frames import CodeImage, Renderer, frame_times, stamp_times
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
    """What really happened in a clip. Times count from the first frame; a turn cut by the clip's ends reaches over."""

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
    """Return the truth of a clip without rendering it; turns and events wholly outside the clip are left out."""
    times = frame_times(scene.timing, motion, scene.seed)
    begin_s, end_s = float(times[0]), float(times[-1])
    turns = [turn for turn in motion.turns if turn.end_s > begin_s and turn.start_s < end_s]
    events = [event for event in motion.events if event.end_s >= begin_s and event.start_s <= end_s]
    return Truth(
        turns=tuple(replace(turn, start_s=turn.start_s - begin_s, end_s=turn.end_s - begin_s) for turn in turns),
        events=tuple(replace(event, start_s=event.start_s - begin_s, end_s=event.end_s - begin_s) for event in events),
        commands=motion.commands,
        frame_s=stamp_times(scene.timing, times, scene.seed),
        frame_heading_deg=motion.heading_deg(times),
    )


class StorageWords(TypedDict, total=False):
    """The fields of `Storage` as keywords."""

    codec: str
    bitrate: int | None
    crf: float | None
    preset: str | None
    pix_fmt: str | None
    gop: int
    options: dict[str, str]
    rotation_deg: int
    mirrored: bool
    audio: bool
    container_options: dict[str, str]


@dataclass(frozen=True, kw_only=True)
class Storage:
    """How a clip is coded and stored.

    `rotation_deg` (0, 90, 180, 270) and `mirrored` are what a player must do to show the picture upright: rotate
    counter-clockwise, then swap left and right. The picture is stored accordingly. `container_options` go to the
    muxer, for example ``{"movflags": "frag_keyframe+empty_moov"}`` for a file that survives being cut off.
    """

    codec: str = "h264"
    bitrate: int | None = None
    crf: float | None = None
    preset: str | None = None
    pix_fmt: str | None = None
    gop: int = 30
    options: dict[str, str] = field(default_factory=dict)
    rotation_deg: int = 0
    mirrored: bool = False
    audio: bool = False
    container_options: dict[str, str] = field(default_factory=dict)

    def __post_init__(self) -> None:
        if self.codec not in ENCODERS:
            raise ValueError(f"unknown codec {self.codec!r}; choose one of {', '.join(ENCODERS)}")
        if self.rotation_deg not in (0, 90, 180, 270):
            raise ValueError(f"rotation_deg is {self.rotation_deg}; it must be 0, 90, 180 or 270")


def render_clip(
    scene: Scene, motion: Motion, path: str | Path, *, frames_csv: bool = False, **storage: Unpack[StorageWords]
) -> Truth:
    """Render and encode a clip, and write ``<clip>.truth.json`` beside it.

    Parameters
    ----------
    scene, motion
        What is filmed. With ``scene.sensor.bits == 10`` the stream has 10 bits.
    path
        Where to write; the ending chooses the container.
    frames_csv
        Also write ``<clip>.frames.csv`` with the heading at every frame.
    **storage
        The fields of `Storage`: codec (``h264``, ``hevc``, ``vp9``, ``av1``, ``mjpeg``, ``ffv1``, ``raw``), bitrate
        or crf, preset, pix_fmt, gop, options, rotation_deg, mirrored, audio, container_options.
    """
    path = Path(path)
    way = Storage(**storage)
    if way.codec in ("vp9", "mjpeg") and scene.sensor.bits != 8:
        raise ValueError(f"{way.codec} is written with 8 bits only, not {scene.sensor.bits}")
    truth = truth_of(scene, motion)
    with av.open(str(path), "w", options=dict(way.container_options)) as container:
        stream = open_stream(container, scene, way)
        sound = open_sound(container) if way.audio else None
        tick = stream.codec_context.time_base
        for frame, time_s in coded_frames(scene, motion, stream.pix_fmt, way):
            frame.time_base = tick
            frame.pts = round((time_s + scene.timing.first_s) / tick)
            container.mux(stream.encode(frame))
        container.mux(stream.encode(None))
        if sound is not None:
            write_sound(container, sound, float(truth.frame_s[-1]))
    write_truth(path, truth, frames_csv)
    return truth


def coded_frames(scene: Scene, motion: Motion, pix_fmt: str, way: Storage) -> Iterator[tuple[av.VideoFrame, float]]:
    """Yield the frames to encode, stored as `way` says, with their time since the first."""
    renderer = Renderer(scene)
    colours = Colours(renderer) if scene.tint else None
    times = frame_times(scene.timing, motion, scene.seed)
    stamps = stamp_times(scene.timing, times, scene.seed)
    for time_s, stamp_s in zip(times, stamps, strict=True):
        luma = lying(renderer.frame(float(time_s), motion), way)
        planes = [luma]
        if colours is not None and "420" in pix_fmt:
            planes += [lying(plane, way) for plane in colours.planes(float(time_s), motion)]
        yield video_frame(planes, pix_fmt, scene.sensor.full_range), float(stamp_s)


def lying(picture: CodeImage, way: Storage) -> CodeImage:
    """Return the upright picture as it is stored."""
    if way.mirrored:
        picture = picture[:, ::-1]
    return np.ascontiguousarray(np.rot90(picture, -(way.rotation_deg // 90)))


def open_stream(container: av.container.OutputContainer, scene: Scene, way: Storage) -> av.VideoStream:
    """Add the video stream with its settings."""
    rate = Fraction(scene.timing.fps).limit_denominator(1001)
    stream = container.add_stream(ENCODERS[way.codec], rate=rate, options=encoder_options(way))
    size = (scene.camera.width_px, scene.camera.height_px)
    stream.width, stream.height = size[::-1] if way.rotation_deg in (90, 270) else size
    stream.pix_fmt = way.pix_fmt or default_format(way.codec, scene)
    stream.codec_context.time_base = 1 / rate if container.format.name == "avi" else TIME_BASE
    stream.codec_context.color_range = 2 if scene.sensor.full_range else 1
    stream.codec_context.thread_count = 1  # the same file whatever the machine
    if way.bitrate is not None:
        stream.bit_rate = way.bitrate
    if way.codec in ("h264", "hevc", "vp9", "av1"):
        stream.codec_context.gop_size = way.gop
    if way.rotation_deg or way.mirrored:
        stream.set_display_matrix(display_matrix(way))
    return stream


def encoder_options(way: Storage) -> dict[str, str]:
    """Return the encoder's options, with quick ones where nothing else is asked for."""
    settings = dict(way.options)
    if way.crf is not None:
        settings.setdefault("crf", str(way.crf))
    quick = {"h264": "veryfast", "hevc": "veryfast", "av1": "10"}
    preset = way.preset or quick.get(way.codec)
    if preset is not None:
        settings.setdefault("preset", preset)
    if way.codec == "hevc":
        settings.setdefault("x265-params", "log-level=error:pools=none:frame-threads=1")
    if way.codec == "vp9":
        settings.setdefault("deadline", "realtime")
        settings.setdefault("cpu-used", "7")
    if way.codec == "av1":
        settings.setdefault("svtav1-params", "lp=1")
    if way.codec == "mjpeg" and way.bitrate is None:
        settings.setdefault("qmin", "2")
        settings.setdefault("qmax", "4")
    return settings


def display_matrix(way: Storage) -> list[int]:
    """Return the display matrix (ISO/IEC 14496-12, 6.2.2) that shows the stored picture upright.

    A stored point (p, q), y down, is shown at (a p + c q, b p + d q); the matrix is stored as a, b, u, c, d, v, x,
    y, w, with 16 fractional bits, 30 for the last column.
    """
    turn = np.deg2rad(way.rotation_deg)
    cos, sin = round(np.cos(turn)), round(np.sin(turn))
    shown_x, shown_y = (cos, sin), (-sin, cos)  # counter-clockwise in a picture whose y points down
    if way.mirrored:
        shown_x = (-shown_x[0], -shown_x[1])
    one = 1 << 16
    return [shown_x[0] * one, shown_y[0] * one, 0, shown_x[1] * one, shown_y[1] * one, 0, 0, 0, 1 << 30]


def open_sound(container: av.container.OutputContainer) -> av.AudioStream:
    """Add a mono sound track in a codec that the container knows."""
    codec = "libopus" if container.format.name == "webm" else "aac"
    return container.add_stream(codec, rate=48000, layout="mono")


def write_sound(container: av.container.OutputContainer, stream: av.AudioStream, duration_s: float) -> None:
    """Write a quiet hum as long as the pictures."""
    block = 960
    for start in range(0, int(duration_s * 48000), block):
        hum = 0.02 * np.sin(2 * np.pi * 100.0 * (start + np.arange(block)) / 48000)
        frame = av.AudioFrame.from_ndarray(hum[None].astype(np.float32), format="fltp", layout="mono")
        frame.sample_rate, frame.pts, frame.time_base = 48000, start, Fraction(1, 48000)
        container.mux(stream.encode(frame))
    container.mux(stream.encode(None))


def default_format(codec: str, scene: Scene) -> str:
    """Return the pixel format for a codec and a bit depth."""
    if scene.sensor.bits == 10:
        return "yuv420p10le"
    if codec == "mjpeg":
        return "yuvj420p"
    return "gray" if codec in ("ffv1", "raw") else "yuv420p"


def video_frame(planes: Sequence[CodeImage], pix_fmt: str, full_range: bool) -> av.VideoFrame:
    """Return a frame with the given luma and chroma code values; neutral chroma where none is given."""
    luma = planes[0]
    frame = av.VideoFrame(luma.shape[1], luma.shape[0], pix_fmt)
    frame.color_range = 2 if full_range else 1
    neutral = 128 if luma.dtype == np.uint8 else 512
    for index, plane in enumerate(frame.planes):
        if index < len(planes):
            fill_plane(plane, planes[index])
        else:
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
