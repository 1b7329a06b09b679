"""The only module that opens a clip: frames with luma, true presentation time, upright.

Nothing is copied that need not be: `Frame.luma` is a view into the decoder's own buffer wherever the pixel
format keeps luma in its first plane. Rotation and mirror flags of the container are applied as array views.
A decoder thread runs ahead of the caller by a few frames, so decoding overlaps with tracking.
"""

from __future__ import annotations

import collections
import contextlib
import itertools
import math
import os
import queue
import sys
import threading
from collections.abc import Callable, Iterator, Sequence
from dataclasses import dataclass
from fractions import Fraction
from pathlib import Path
from types import TracebackType
from typing import Any, Self

import av
import numpy as np
from av.sidedata.sidedata import Type as SideDataType
from numpy.typing import NDArray

from vision.boxes import boxes_of
from vision.errors import ClipError
from vision.records import ClipInfo
from vision.sparse import LOOK_BACK_S, Group, dearest, grouped, is_dear, may_be_passed_over, n_kept, picture_moved

LumaImage = NDArray[np.uint8] | NDArray[np.uint16]

MORE_THREADS = 4
"""Threads that decode beyond one per core: frames wait for each other's lines, and the cores must not wait too."""

MOST_CORES = 12
"""More cores than this are left alone: FFmpeg decodes with at most 16 threads."""

FRAMES_AHEAD = 6
"""Decoded frames that may wait for the tracker: enough to overlap, little memory even in 4K."""

SWITCH_S = 3e-4
"""How soon the interpreter gives the decoder its turn while the tracker computes; by default (5 ms) it starves."""

MAX_PIXELS = 64_000_000
"""A larger picture is refused: no phone makes it, and a forged header could exhaust the memory."""

CLOSE_S = 1e-4
"""Times nearer than this are the same: tables keep a hundred-thousandth of a second."""

SHORT_BY_S, SHORT_BY_SHARE = 1.0, 0.05
"""A clip whose pictures end before its length by more than this broke off: sound may last a little longer."""

_LUMA_FIRST = ("yuv", "nv12", "nv21", "nv16", "p010", "p016", "gray")


@dataclass(frozen=True, eq=False, slots=True)
class Frame:
    """One decoded picture.

    Parameters
    ----------
    index : int
        Count of frames decoded so far, from 0.
    time_s : float
        Presentation time, counted from the first frame of the clip.
    luma : ndarray, shape (height, width), uint8 or uint16
        Brightness, upright; read only, and possibly strided.
    is_key : bool
        Whether the picture was coded without reference to others.
    """

    index: int
    time_s: float
    luma: LumaImage
    is_key: bool


@dataclass(frozen=True, slots=True)
class _Upright:
    """How to turn a stored picture upright: quarter turns counter-clockwise, after an optional flip."""

    quarter_turns: int
    flip: bool

    def apply(self, image: LumaImage) -> LumaImage:
        """Return an upright view of `image`."""
        if self.flip:
            image = image[:, ::-1]
        return np.rot90(image, self.quarter_turns) if self.quarter_turns else image


class Clip:
    """A clip opened for reading; use it as a context manager.

    Parameters
    ----------
    path : path-like
        Any container and codec that FFmpeg reads.
    threads : int or None
        Threads that decode; None for `MORE_THREADS` beyond one per core.

    Raises
    ------
    ClipError
        If the file is missing, holds no video, or cannot be decoded at all.
    """

    def __init__(self, path: str | Path, *, threads: int | None = None) -> None:
        self.path = Path(path)
        self._container = _open_container(self.path)
        try:
            self._stream = _video_stream(self._container, self.path)
            self._stream.codec_context.thread_count = threads or _n_cores() + MORE_THREADS
            self._upright = _upright_of(self.path)
        except BaseException:
            self._container.close()
            raise
        self.info = _clip_info(self._container, self._stream, self._upright)
        self.problems: list[str] = []
        """What went wrong while reading, a sentence each; complete once `frames` is exhausted."""
        self.passed_over: list[tuple[float, float]] = []
        """Stretches (start_s, end_s) that a sparse reading left undecoded; complete once `frames` is exhausted."""
        self._n_bad = 0
        self._n_unlike = 0
        self._kind: tuple[int, int, str] | None = None
        self._broken = False
        self._stop = threading.Event()
        self._worker: threading.Thread | None = None

    def __enter__(self) -> Self:
        return self

    def __exit__(
        self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None
    ) -> None:
        self.close()

    def close(self) -> None:
        """Stop the decoder thread, wait for it, and only then close the file that it reads."""
        self._stop.set()
        if self._worker is not None:
            self._worker.join()
        self._container.close()

    def frames(self, *, sparse: bool = False) -> Iterator[Frame]:
        """Yield the frames in presentation order, once, decoding ahead in a thread of its own.

        Parameters
        ----------
        sparse : bool
            Whether stretches in which nothing moves may be passed over (`vision.sparse`); `passed_over` tells which.

        Raises
        ------
        ClipError
            If not a single frame can be decoded.
        """
        waiting: queue.Queue[Frame | BaseException | None] = queue.Queue(maxsize=FRAMES_AHEAD)
        self._worker = threading.Thread(target=self._decode_into, args=(waiting, sparse), name="decode", daemon=True)
        self._worker.start()
        n_frames = 0
        patience_s = sys.getswitchinterval()
        sys.setswitchinterval(min(patience_s, SWITCH_S))
        try:
            while (item := waiting.get()) is not None:
                if isinstance(item, BaseException):
                    raise item
                n_frames += 1
                yield item
        finally:
            sys.setswitchinterval(patience_s)
            self._stop.set()
        if n_frames == 0:
            raise ClipError(f"{self.path.name}: no picture in it can be decoded; is the file complete?")

    def frame_in_each(self, spans_s: Sequence[tuple[float, float]]) -> Iterator[Frame | None]:
        """Yield one frame of each stretch of time, decoding as little as the key frames allow.

        Parameters
        ----------
        spans_s : sequence of (start_s, end_s)
            In order of time; both ends belong to the stretch.

        Yields
        ------
        Frame or None
            A key frame of the stretch if it has one, or its first frame; None where nothing could be decoded. The
            index of these frames is -1: what lies between them is not counted.
        """
        try:
            keys = _KeyFrames(self.path)
        except (av.error.FFmpegError, EOFError):
            yield from (None for _ in spans_s)
            return
        pictures: Iterator[Any] = iter(())
        now_s = -math.inf
        for start_s, end_s in spans_s:
            entry_s = keys.best(start_s, end_s)
            if entry_s > now_s:
                self._container.seek(keys.stamp(entry_s), stream=self._stream, backward=True)
                pictures = self._pictures(_Clock(self._stream))
            frame = None
            for picture in pictures:
                now_s = keys.time_s(picture.pts) if picture.pts is not None else math.inf
                if now_s >= start_s - CLOSE_S:
                    if now_s <= end_s + CLOSE_S:
                        frame = Frame(-1, now_s, self._luma(picture), bool(picture.key_frame))
                    break
            yield frame

    def _decode_into(self, waiting: queue.Queue[Frame | BaseException | None], sparse: bool) -> None:
        try:
            for frame in self._decode(sparse):
                if not self._put(waiting, frame):
                    return
            self._put(waiting, None)
        except BaseException as error:  # handed to the caller's thread, never lost
            self._put(waiting, error)

    def _put(self, waiting: queue.Queue[Frame | BaseException | None], item: Frame | BaseException | None) -> bool:
        while not self._stop.is_set():
            with contextlib.suppress(queue.Full):
                waiting.put(item, timeout=0.1)
                return True
        return False

    def _decode(self, sparse: bool) -> Iterator[Frame]:
        clock = _Clock(self._stream)
        pictures = self._pictures_sparsely(clock) if sparse else self._pictures(clock)
        for index, picture in enumerate(pictures):
            yield Frame(index, clock.time_s(picture), self._luma(picture), bool(picture.key_frame))

    def _pictures(self, clock: _Clock) -> Iterator[Any]:
        """Yield decoded pictures, stepping over packets that cannot be decoded."""
        for packet in self._packets(clock):
            yield from self._decoded(packet)
        self._note_end(clock)

    def _packets(self, clock: _Clock) -> Iterator[Any]:
        """Yield the packets of the clip as far as it can be read, and at last the empty one that drains the decoder."""
        packets = self._container.demux(self._stream)
        while True:
            try:
                packet = next(packets)
            except StopIteration:
                break
            except (av.error.FFmpegError, EOFError) as error:
                self._note(
                    f"the file breaks off or is damaged: nothing could be read after {clock.last_s:.2f} s "
                    f"({_reason(error)})"
                )
                self._broken = True
                break
            yield packet

    def _decoded(self, packet: Any) -> list[Any]:
        try:
            return [picture for picture in packet.decode() if self._is_alike(picture)]
        except (av.error.FFmpegError, EOFError):
            self._n_bad += 1
            return []

    def _is_alike(self, picture: Any) -> bool:
        """Return whether a picture is like the first: only damage changes size or format within a clip."""
        kind = (picture.width, picture.height, picture.format.name)
        self._kind = self._kind or kind
        self._n_unlike += kind != self._kind
        return kind == self._kind

    def _pictures_sparsely(self, clock: _Clock) -> Iterator[Any]:
        """Yield decoded pictures of what moves, and of still stretches little more than the key frames."""
        reader = _SparseReader(self._stream, self._decoded, self.passed_over)
        yield from reader.pictures(self._packets(clock))
        self._note_end(clock)

    def _note_end(self, clock: _Clock) -> None:
        """Say what could not be decoded, and if the file ends before it should by its own account."""
        if self._n_bad:
            self._note(f"{self._n_bad} damaged packets could not be decoded")
        if self._n_unlike:
            self._note(f"{self._n_unlike} pictures of another size or format than the first were passed over: damage")
        if self._broken:
            return
        promised_s = self.info.duration_s or 0.0
        boxes = boxes_of(self.path)
        early = promised_s - clock.last_s > max(SHORT_BY_S, SHORT_BY_SHARE * promised_s)
        if early or (boxes is not None and not boxes.whole):
            length = f" of {promised_s:.2f} s" if early else ""
            self._note(f"the file breaks off: nothing could be read after {clock.last_s:.2f} s{length}")

    def _note(self, problem: str) -> None:
        self.problems.append(f"{self.path.name}: {problem}")

    def _luma(self, picture: Any) -> LumaImage:
        if picture.width * picture.height > MAX_PIXELS:
            raise ClipError(_too_large(self.path, picture.width, picture.height))
        return self._upright.apply(_luma_plane(picture))


class _SparseReader:
    """Reads a stream by groups of packets from key frame to key frame; mutable, one for a reading.

    While something moves, groups are decoded in full one after the other. Once the picture stands, the next key frame
    is decoded by a second decoder, to see whether it still stands there. A still group next to a moving one gives a few
    frames, any other its key frame alone.
    """

    def __init__(
        self, stream: Any, decoded: Callable[[Any], list[Any]], passed_over: list[tuple[float, float]]
    ) -> None:
        self._stream = stream
        self._decoded = decoded
        self._passed_over = passed_over
        self._first: int | None = None
        self._moving = True
        self._broken_off = False
        self._quiet = math.inf
        self._prober = av.CodecContext.create(stream.codec_context.name, "r")
        self._prober.extradata = stream.codec_context.extradata
        self._prober.thread_count = stream.codec_context.thread_count
        self._prober.thread_type = "SLICE"

    def pictures(self, packets: Iterator[Any]) -> Iterator[Any]:
        pending: Group | None = None  # a still group, until it is known whether the one after it moves
        after_motion = True
        group: Group | None = None
        for following in itertools.chain(grouped(packets, self._time_s), [None]):
            if group is not None:
                group.moved = following is None or self._moves(group, following)
                if pending is not None:
                    yield from self._still(pending, group, whole=after_motion or group.moved)
                    after_motion = False
                pending = None if group.moved else group
                if group.moved:
                    yield from self._all_of(group)
                    after_motion = True
            group = following

    def _time_s(self, packet: Any) -> float:
        if packet.pts is None:
            return math.nan  # the empty packet at the end, or a container without times: never passed over
        self._first = packet.pts if self._first is None else self._first
        return float((packet.pts - self._first) * self._stream.time_base)

    def _moves(self, group: Group, following: Group) -> bool:
        """Return whether anything moves in a group, or may."""
        self._quiet = min(self._quiet, dearest(group))
        if self._moving or not may_be_passed_over(group, following) or is_dear(group, self._quiet):
            following.key = None
            return True
        group.key = group.key if group.key is not None else self._probe(group)
        following.key = self._probe(following)
        if group.key is None or following.key is None:
            return True
        return picture_moved(_luma_plane(group.key), _luma_plane(following.key))

    def _probe(self, group: Group) -> Any:
        """Return the key frame of a group, decoded apart from the others; None if it cannot be."""
        try:
            found = [*self._prober.decode(group.packets[0]), *self._prober.decode(None)]
            self._prober.flush_buffers()
        except (av.error.FFmpegError, EOFError):
            return None
        return found[0] if found else None

    def _all_of(self, group: Group) -> Iterator[Any]:
        """Decode a group in full, and note whether something still moves at its end."""
        self._resume()
        seen: collections.deque[Any] = collections.deque()
        for packet in group.packets:
            for picture in self._decoded(packet):
                seen.append(picture)
                while len(seen) > 2 and self._apart_s(seen[1], picture) >= LOOK_BACK_S:
                    seen.popleft()
                yield picture
        self._moving = len(seen) < 2 or picture_moved(_luma_plane(seen[0]), _luma_plane(seen[-1]))

    def _apart_s(self, one: Any, other: Any) -> float:
        if one.pts is None or other.pts is None:
            return 0.0
        return float((other.pts - one.pts) * self._stream.time_base)

    def _still(self, group: Group, following: Group, *, whole: bool) -> Iterator[Any]:
        """Yield what is wanted of a still group: some frames, or its key frame alone."""
        kept = n_kept(group) if whole else 1
        if whole:
            self._resume()
            for packet in group.packets[:kept]:
                yield from self._decoded(packet)
            yield from self._drained()
        else:
            yield from self._drained()
            yield group.key
        self._broken_off = True
        first_s = min(group.times_s[kept:], default=following.times_s[0])
        last_s = max(time_s for time_s in group.times_s[:kept] if time_s < first_s)
        if kept < len(group.packets):
            self._passed_over.append((last_s, following.times_s[0]))

    def _drained(self) -> list[Any]:
        """Return what the decoder still holds, before packets are left out."""
        if self._broken_off:
            return []
        self._broken_off = True
        try:
            return list(self._stream.codec_context.decode(None))
        except (av.error.FFmpegError, EOFError):
            return []

    def _resume(self) -> None:
        if self._broken_off:
            self._stream.codec_context.flush_buffers()
        self._broken_off = False


class _KeyFrames:
    """The times at which a clip can be entered, from its packets alone: nothing is decoded."""

    def __init__(self, path: Path) -> None:
        with _open_container(path) as container:
            stream = _video_stream(container, path)
            self._base = stream.time_base or Fraction(1, 1)
            stamps = [(packet.pts, packet.is_keyframe) for packet in container.demux(stream) if packet.pts is not None]
        self._first = min((stamp for stamp, _ in stamps), default=0)
        self._times_s = sorted(self.time_s(stamp) for stamp, is_key in stamps if is_key)

    @property
    def all_s(self) -> list[float]:
        """Times of the key frames, in order."""
        return self._times_s

    def time_s(self, stamp: int) -> float:
        """Return the time of a stamp from the first picture on."""
        return float((stamp - self._first) * self._base)

    def stamp(self, time_s: float) -> int:
        """Return the stamp of a time."""
        return self._first + round(time_s / float(self._base))

    def best(self, start_s: float, end_s: float) -> float:
        """Return the time of a key frame in the stretch, or of the last one before it."""
        inside = [time_s for time_s in self._times_s if start_s <= time_s <= end_s]
        before = [time_s for time_s in self._times_s if time_s < start_s]
        return inside[0] if inside else before[-1] if before else -math.inf


def key_interval_s(path: Path) -> float:
    """Return the usual time between two key frames of a clip, from its packets; infinite if it has only one."""
    times_s = _KeyFrames(path).all_s
    return float(np.median(np.diff(times_s))) if len(times_s) > 1 else math.inf


class _Clock:
    """Presentation times from the first frame on, never running backwards."""

    def __init__(self, stream: Any) -> None:
        self._base = float(stream.time_base) if stream.time_base else 0.0
        rate = stream.average_rate or stream.base_rate
        self._step_s = 1.0 / float(rate) if rate else 1.0 / 30.0
        self._first_s: float | None = None
        self.last_s = 0.0

    def time_s(self, picture: Any) -> float:
        if picture.pts is None or not self._base:
            now_s = self.last_s + self._step_s if self._first_s is not None else 0.0
            self._first_s = 0.0 if self._first_s is None else self._first_s
        else:
            stamp_s = picture.pts * self._base
            self._first_s = stamp_s if self._first_s is None else self._first_s
            now_s = stamp_s - self._first_s
        self.last_s = max(self.last_s, now_s)
        return self.last_s


def _n_cores() -> int:
    n_cores = len(os.sched_getaffinity(0)) if hasattr(os, "sched_getaffinity") else os.cpu_count() or 1
    return min(n_cores, MOST_CORES)


def _open_container(path: Path) -> Any:
    if path.is_dir():
        raise ClipError(f"{path}: is a folder, not a clip; give the clip files in it")
    if not path.exists():
        raise ClipError(f"{path}: no such file; check the path of the clip")
    if not path.is_file():
        raise ClipError(f"{path}: is a device or a pipe, not a file; give a clip that is stored whole")
    try:
        return av.open(str(path), mode="r", metadata_errors="replace")
    except (av.error.FFmpegError, OSError, ValueError) as error:
        boxes = boxes_of(path)
        if boxes is not None and not boxes.indexed:
            raise ClipError(
                f"{path.name}: its index is missing, so nothing in it can be read: recording or copying broke off; "
                "copy it from the phone again"
            ) from error
        raise ClipError(
            f"{path.name}: cannot be read as a clip ({_reason(error)}); accepted: mp4, mov, mkv, webm, avi"
        ) from error


def _video_stream(container: Any, path: Path) -> Any:
    if not container.streams.video:
        raise ClipError(f"{path.name}: holds no video; accepted: mp4, mov, mkv, webm, avi with a picture")
    stream = container.streams.video[0]
    if "image2" in container.format.name or container.format.name.endswith("_pipe"):
        raise ClipError(f"{path.name}: is a still picture, not a clip; film the turns")
    try:
        width, height = stream.codec_context.width, stream.codec_context.height
    except AttributeError:
        raise ClipError(f"{path.name}: the codec of its video is not known here") from None
    if width * height > MAX_PIXELS:
        raise ClipError(_too_large(path, width, height))
    stream.thread_type = "AUTO"
    return stream


def _too_large(path: Path, width_px: int, height_px: int) -> str:
    return (
        f"{path.name}: pictures of {width_px} x {height_px} px; accepted up to {MAX_PIXELS // 10**6} million "
        "pixels; film in 4K at the most"
    )


def _upright_of(path: Path) -> _Upright:
    """Read the display matrix off the first frame that decodes, through a container of its own."""
    matrix = None
    with _open_container(path) as container, contextlib.suppress(av.error.FFmpegError, EOFError):
        for picture in container.decode(container.streams.video[0]):
            matrix = _display_matrix(picture)
            break
    return upright_from_matrix(matrix) if matrix is not None else _Upright(0, flip=False)


def _display_matrix(picture: Any) -> NDArray[np.float64] | None:
    for item in picture.side_data:
        if item.type == SideDataType.DISPLAYMATRIX:
            raw = np.frombuffer(bytes(item), dtype=np.int32, count=9).reshape(3, 3)
            return raw[:2, :2] / 65536.0
    return None


def upright_from_matrix(matrix: NDArray[np.float64]) -> _Upright:
    """Return the views that show a picture as its display matrix asks.

    Parameters
    ----------
    matrix : ndarray, shape (2, 2)
        Upper left of the container's matrix: the row vector (x, y) of a stored pixel, times this, is where
        it is shown (x right, y down).

    Notes
    -----
    Only quarter turns and mirrors are honoured; any other matrix is rounded to the nearest.
    """
    flip = bool(np.linalg.det(matrix) < 0)
    if flip:
        matrix = np.diag([-1.0, 1.0]) @ matrix
    # Stored +x is shown along (matrix[0, 0], matrix[0, 1]); y points down, hence the minus.
    angle_rad = np.arctan2(-matrix[0, 1], matrix[0, 0])
    return _Upright(int(np.round(angle_rad / (np.pi / 2))) % 4, flip)


def _clip_info(container: Any, stream: Any, upright: _Upright) -> ClipInfo:
    width, height = stream.codec_context.width, stream.codec_context.height
    if upright.quarter_turns % 2:
        width, height = height, width
    rate = stream.average_rate
    duration_s = container.duration / 1e6 if container.duration else None
    return ClipInfo(
        width_px=width,
        height_px=height,
        codec=stream.codec_context.name,
        pixel_format=stream.codec_context.pix_fmt or "unknown",
        rotation_deg=90 * upright.quarter_turns,
        mirrored=upright.flip,
        nominal_rate_hz=float(rate) if rate else None,
        duration_s=duration_s,
    )


def _luma_plane(picture: Any) -> LumaImage:
    name = picture.format.name
    if not name.startswith(_LUMA_FIRST) or name.endswith("be"):
        picture = picture.reformat(format="gray")
        name = "gray"
    plane = picture.planes[0]
    if name.startswith(("yuyv", "yvyu", "uyvy")):
        picture = picture.reformat(format="gray")
        plane = picture.planes[0]
    if picture.format.components[0].bits > 8:
        deep = np.frombuffer(plane, dtype=np.uint16).reshape(plane.height, plane.line_size // 2)
        return deep[:, : plane.width]
    rows = np.frombuffer(plane, dtype=np.uint8).reshape(plane.height, plane.line_size)
    return rows[:, : plane.width]


def _reason(error: BaseException) -> str:
    text = getattr(error, "strerror", None) or str(error) or type(error).__name__
    return str(text).strip().rstrip(".").lower()
