"""The annotated clip: plays in a browser, drawn where the robot is, whole or not at all."""

from __future__ import annotations

from dataclasses import replace
from pathlib import Path
from typing import Any

import av
import numpy as np
import pytest
from click.testing import CliRunner

from floorswing.cli import cli
from floorswing.errors import FileError
from floorswing.files import read_measurement
from floorswing.report.overlay import annotate, blank, canvas_size, caption, eight_bits, letters, turn_at
from floorswing.report.recorder import Recorder
from vision.redraw import pair_px, view_from

from .report_data import RATE_HZ, SIZE_PX, commands, redraw, write_folder


@pytest.fixture(scope="module")
def trial(tmp_path_factory: pytest.TempPathFactory) -> Path:
    return write_folder(tmp_path_factory.mktemp("overlay"), "cork", commands(4))


@pytest.fixture(scope="module")
def annotated(trial: Path, tmp_path_factory: pytest.TempPathFactory) -> Path:
    one = read_measurement(trial, with_track=True)
    return annotate(one, Path(str(one.source.path)), tmp_path_factory.mktemp("out") / "a.mp4")


def frames_of(path: Path) -> tuple[Any, list[tuple[float, np.ndarray]]]:
    with av.open(str(path)) as container:
        stream = container.streams.video[0]
        found = [(float(frame.time), frame.to_ndarray(format="yuv420p")) for frame in container.decode(stream)]
        return stream.codec_context, found


def test_it_is_what_browsers_play(annotated: Path, trial: Path):
    codec, frames = frames_of(annotated)
    assert codec.name == "h264"
    assert codec.pix_fmt == "yuv420p"
    assert (codec.width, codec.height) == SIZE_PX
    _, plain = frames_of(Path(str(read_measurement(trial).source.path)))
    assert [time_s for time_s, _ in frames] == pytest.approx([time_s for time_s, _ in plain], abs=1e-3)
    content = annotated.read_bytes()
    assert content.index(b"moov") < content.index(b"mdat")  # playback starts before the file is complete


def test_outlines_lie_on_the_squares_and_only_they_have_colour(annotated: Path, trial: Path):
    one = read_measurement(trial, with_track=True)
    assert one.track is not None
    _, frames = frames_of(annotated)
    corners = pair_px(view_from(redraw(), SIZE_PX), one.track.heading_deg, one.track.x_mm, one.track.y_mm)
    height = SIZE_PX[1]
    for (_, planes), quads in list(zip(frames, corners, strict=True))[::6]:
        chroma = planes[height:].reshape(-1)
        blue, red = (part.reshape(height // 2, SIZE_PX[0] // 2).astype(int) for part in np.split(chroma, 2))
        for quad in quads:
            sides = zip(quad, np.roll(quad, -1, axis=0), strict=True)
            edges = np.concatenate([np.linspace(a, b, 9)[1:-1] for a, b in sides])
            x, y = np.round(edges / 2).astype(int).T
            assert np.median(blue[y, x] - red[y, x]) > 25  # cyan: much blue, little red
        coloured = (np.abs(blue - 128) + np.abs(red - 128)) > 40
        y, x = np.nonzero(coloured)
        middle = corners[:, :].mean(axis=(0, 1, 2)) / 2
        assert np.hypot(x - middle[0], y - middle[1]).max() < 140


def test_number_and_running_change_are_written_below(trial: Path):
    turns = read_measurement(trial).turns
    first = turns[0]
    assert turn_at(turns, 0.1) == (None, False)
    assert turn_at(turns, first.start_s + 0.1) == (first, True)
    assert turn_at(turns, first.end_s + 0.1) == (first, False)
    assert caption(None, False, None) == ("at rest", "", "")
    assert caption(first, True, None) == ("turn 1", "+187.5 wheel deg", "not seen")
    number, command, change = caption(turns[2], False, None)
    assert (number, command) == ("turn 3", "\u2212187.5 wheel deg")
    assert change == f"{turns[2].heading_change_deg:+.3f}° ± 0.024°".replace("-", "\u2212")
    assert caption(replace(first, commanded_wheel_deg=float("nan")), False, None)[1] == "no command"


def test_letters_are_drawn_about_their_base_line():
    mask, rise = letters("turn 7", 20)
    assert mask.max() > 200
    assert 12 <= rise <= 22
    below, rise_below = letters("g", 20)
    assert below.shape[0] > rise_below  # it hangs below


def test_luma_of_any_depth_comes_out_in_eight_bits():
    assert eight_bits(np.full((2, 2), 940, np.uint16), "yuv420p10le")[0, 0] == 235
    assert eight_bits(np.full((2, 2), 940 << 6, np.uint16), "p010le")[0, 0] == 235
    assert eight_bits(np.full((2, 2), 255, np.uint8), "yuvj420p")[0, 0] == 235
    assert eight_bits(np.full((2, 2), 0, np.uint8), "yuvj420p")[0, 0] == 16
    assert eight_bits(np.full((2, 2), 77, np.uint8), "yuv420p")[0, 0] == 77


def test_large_pictures_are_scaled_down_and_odd_ones_cut_to_even(trial: Path):
    info = read_measurement(trial).source.info
    large = replace(info, width_px=3840, height_px=2160)
    assert canvas_size(large) == (1920, 1080, 0.5)
    assert canvas_size(replace(info, width_px=1081, height_px=1921))[:2] == (1080, 1920)
    grey = np.full((2160, 3840), 90, np.uint8)
    canvas = blank(grey, large, *canvas_size(large))
    assert canvas.luma.shape == (1080, 1920)
    canvas.line(np.array([[1000.0, 500.0], [1400.0, 500.0]]), (235, 90, 90), 2.0)
    rows, columns = np.nonzero(canvas.luma > 200)
    assert abs(rows.mean() - 249.75) < 0.75  # px; half the size, pixel centres kept
    assert abs(columns.mean() - 599.75) < 0.75


def test_an_interruption_leaves_what_was_there(tmp_path: Path):
    path = tmp_path / "a.mp4"
    path.write_bytes(b"before")
    with pytest.raises(KeyboardInterrupt):
        _interrupted(path)
    assert path.read_bytes() == b"before"
    assert [one.name for one in tmp_path.iterdir()] == ["a.mp4"]


def _interrupted(path: Path) -> None:
    with Recorder(path, 64, 48, 10.0) as recorder:
        recorder.write(np.full((72, 64), 128, np.uint8), 0.0)
        raise KeyboardInterrupt


def test_a_folder_that_cannot_be_written_is_one_line(tmp_path: Path):
    with pytest.raises(FileError, match="cannot be written"):
        Recorder(tmp_path / "no such" / "a.mp4", 64, 48, 10.0)


def test_the_command_writes_it_beside_the_page(trial: Path, tmp_path: Path, monkeypatch: pytest.MonkeyPatch):
    monkeypatch.setattr("floorswing.report.page.pictures_of", lambda subject: [])
    result = CliRunner().invoke(cli, ["report", str(trial), "--out", str(tmp_path / "r.html"), "--overlay"])
    assert result.exit_code == 0, result.output
    assert f"Written to {tmp_path / 'cork-annotated.mp4'}" in result.stdout
    assert sorted(one.name for one in tmp_path.iterdir()) == ["cork-annotated.mp4", "r.html"]
    _, frames = frames_of(tmp_path / "cork-annotated.mp4")
    assert len(frames) == round((4 * 0.9 + 0.5) * RATE_HZ) + 1
