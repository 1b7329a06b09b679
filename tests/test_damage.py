"""A small share of the damaged files of `bench.fuzz`, and files that claim to be more than they are.

The whole run: ``python -m bench.fuzz``.
"""

from __future__ import annotations

import itertools
import os
import struct
import zlib
from fractions import Fraction
from pathlib import Path

import av
import numpy as np
import pytest
from numpy.testing import assert_array_equal

from bench.fuzz import base_clips, damaged_clip, damaged_trial, try_clip, try_trial
from vision.errors import ClipError
from vision.frames import Clip
from vision.records import MarkerSetup
from vision.track import track_pair

SEED = 11


@pytest.fixture(scope="module")
def bases(tmp_path_factory: pytest.TempPathFactory) -> dict[str, bytes]:
    return base_clips(tmp_path_factory.mktemp("bases"), endings=("mp4", "mkv"))


def test_the_clips_that_are_damaged_can_be_measured_whole(bases: dict[str, bytes], tmp_path: Path):
    for ending, data in bases.items():
        outcome = try_clip(f"clip.{ending}", data, "", 0, tmp_path / ending)
        assert outcome.ending == "measured", outcome.detail
        assert (tmp_path / ending / "out" / "clip" / "turns.csv").read_text().count("\n") == 3  # header and two turns


def test_the_same_clip_gives_the_same_corners_to_the_last_bit(bases: dict[str, bytes], tmp_path: Path):
    """Wherever memory happens to lie: what is allocated in between moves it."""
    path = tmp_path / "clip.mkv"
    path.write_bytes(bases["mkv"])
    with Clip(path) as clip:
        frames = list(itertools.islice(clip.frames(), 12))
    setup, kept = MarkerSetup(marker_side_mm=40.0, card_side_mm=60.0), []
    first = track_pair(frames, setup).corners_px
    for number in range(4):
        kept.append([np.ones(7 * k + number) for k in range(300)])
        assert_array_equal(track_pair(frames, setup).corners_px, first)


@pytest.mark.parametrize("number", range(24))
def test_a_damaged_clip_is_measured_or_refused_in_one_line(bases: dict[str, bytes], tmp_path: Path, number: int):
    outcome = try_clip(*damaged_clip(bases, SEED, number), number, tmp_path)
    assert outcome.right, outcome


def test_damaged_trial_files_are_read_or_refused_in_one_line(tmp_path: Path):
    outcomes = [try_trial(*damaged_trial(SEED, number), number, tmp_path) for number in range(300)]
    assert [outcome for outcome in outcomes if not outcome.right] == []
    assert {outcome.ending for outcome in outcomes} == {"measured", "refused"}


def test_damage_follows_from_the_seed(bases: dict[str, bytes]):
    assert damaged_clip(bases, SEED, 3) == damaged_clip(bases, SEED, 3)
    assert damaged_clip(bases, SEED, 3) != damaged_clip(bases, SEED, 4)
    assert damaged_trial(SEED, 3) == damaged_trial(SEED, 3)


def y4m(width: int, height: int, n_bytes: int = 100) -> bytes:
    return f"YUV4MPEG2 W{width} H{height} F30:1 Ip A1:1 C420jpeg\nFRAME\n".encode() + bytes(n_bytes)


def png(width: int, height: int) -> bytes:
    """Return a picture that unpacks to a thousand times its size (PNG specification, ISO/IEC 15948, 11.2)."""

    def chunk(kind: bytes, content: bytes) -> bytes:
        return struct.pack(">I", len(content)) + kind + content + struct.pack(">I", zlib.crc32(kind + content))

    packer = zlib.compressobj(9)
    rows = b"".join(packer.compress(bytes(width + 1)) for _ in range(height)) + packer.flush()
    head = struct.pack(">IIBBBBB", width, height, 8, 0, 0, 0, 0)
    return b"\x89PNG\r\n\x1a\n" + chunk(b"IHDR", head) + chunk(b"IDAT", rows) + chunk(b"IEND", b"")


@pytest.mark.parametrize(
    ("name", "content", "says"),
    [
        ("huge.y4m", y4m(12000, 12000), "pictures of 12000 x 12000 px; accepted up to 64 million pixels"),
        ("absurd.y4m", y4m(2_000_000, 2_000_000), "huge|cannot|pictures of"),
        ("empty.y4m", y4m(8000, 8000), "no picture in it can be decoded"),
        ("bomb.png", png(12000, 12000), "still picture|pictures of 12000"),
    ],
)
def test_forged_sizes_are_refused_before_they_take_memory(tmp_path: Path, name: str, content: bytes, says: str):
    path = tmp_path / name
    path.write_bytes(content)
    with pytest.raises(ClipError, match=says) as caught, Clip(path) as clip:
        list(clip.frames())
    assert "\n" not in str(caught.value)


def test_a_pipe_is_no_clip(tmp_path: Path):
    os.mkfifo(tmp_path / "clip.mp4")
    with pytest.raises(ClipError, match="is a device or a pipe"):
        Clip(tmp_path / "clip.mp4")


def test_a_folder_of_stills_is_no_clip(tmp_path: Path):
    (tmp_path / "stills").mkdir()
    (tmp_path / "stills" / "1.png").write_bytes(png(64, 64))
    with pytest.raises(ClipError, match="is a folder, not a clip"):
        Clip(tmp_path / "stills")
    with pytest.raises(ClipError, match="is a still picture, not a clip"):
        Clip(tmp_path / "stills" / "1.png")


def test_pictures_of_another_size_within_a_clip_are_passed_over(tmp_path: Path):
    path = tmp_path / "clip.avi"
    with av.open(str(path), "w") as container:
        stream = container.add_stream("mjpeg", rate=10)
        stream.width, stream.height, stream.pix_fmt = 64, 48, "yuvj420p"
        other = av.CodecContext.create("mjpeg", "w")
        other.width, other.height, other.pix_fmt, other.time_base = 32, 16, "yuvj420p", Fraction(1, 10)
        for number, coder in enumerate([stream, stream, other, other, stream]):
            black = np.zeros((coder.height, coder.width), np.uint8)
            frame = av.VideoFrame.from_ndarray(black, "gray").reformat(format="yuvj420p")
            frame.pts = number
            for packet in coder.encode(frame):
                packet.stream, packet.pts, packet.dts = stream, number, number
                container.mux(packet)
    with Clip(path) as clip:
        assert {frame.luma.shape for frame in clip.frames()} == {(48, 64)}
        assert "2 pictures of another size or format than the first were passed over" in clip.problems[0]
