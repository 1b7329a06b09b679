"""The main job on the bundled clips, end to end, against their truth."""

from __future__ import annotations

import math
import os
import signal
import subprocess
import sys
import time
from pathlib import Path

import av
import pytest
from click.testing import CliRunner

from bench.clips import lengthen
from floorswing.cli import cli
from floorswing.demo import new_folder, truth_sentence
from floorswing.demo_clips import demo_clips
from floorswing.errors import FileError
from floorswing.files import read_measurement
from floorswing.trial import read_trial
from floorswing.truth import TruthCheck, check_against, read_truth

from .conftest import DemoRun

CLIPS = {clip.name: clip for clip in demo_clips()}

RMS_DEG = 0.04
WORST_DEG = 0.10
SHARE_WITHIN = 0.9
"""What is promised for the bundled clips at their encoded quality."""


def test_there_are_three_small_clips_of_three_kinds():
    assert set(CLIPS) == {"cork_calm", "rubber_rough", "lino_mixed"}
    for clip in CLIPS.values():
        assert clip.clip.stat().st_size < 3_000_000
    mixed = read_trial(CLIPS["lino_mixed"].trial).commands.wheel_deg
    assert len({abs(wheel_deg) for wheel_deg in mixed}) >= 5
    for clip in CLIPS.values():
        signs = {math.copysign(1, wheel_deg) for wheel_deg in read_trial(clip.trial).commands.wheel_deg}
        assert signs == {1.0, -1.0}


@pytest.mark.slow
def test_the_demo_runs_and_says_what_to_look_at(demo_run: DemoRun):
    assert demo_run.code == 0, demo_run.stderr
    assert "Traceback" not in demo_run.stderr
    for name in CLIPS:
        assert f"\n{name}: " in demo_run.stdout
    assert demo_run.stdout.count("none invented") == len(CLIPS)
    told = [line.split(": ")[0][2:] for line in demo_run.stdout.splitlines() if line.startswith("- ")]
    assert told
    for path in told:
        assert (demo_run.folder.parent / path).exists(), path


@pytest.mark.slow
@pytest.mark.parametrize("name", CLIPS)
def test_every_turn_is_found_matched_and_within_its_promise(demo_run: DemoRun, name: str):
    measurement = read_measurement(demo_run.folder / name)
    truth = read_truth(CLIPS[name].truth)
    check = check_against(measurement.turns, truth)
    assert (check.n_found, check.n_invented, check.n_right_command) == (len(truth), 0, len(truth))
    assert check.rms_deg < RMS_DEG
    assert check.worst_deg < WORST_DEG
    assert check.n_within >= SHARE_WITHIN * check.n_true
    assert measurement.events == ()
    assert all(turn.flags == () for turn in measurement.turns)


@pytest.mark.slow
@pytest.mark.parametrize("name", CLIPS)
def test_the_files_of_a_clip_agree_with_each_other(demo_run: DemoRun, name: str):
    measurement = read_measurement(demo_run.folder / name, with_track=True)
    track = measurement.track
    assert track is not None
    assert len(track.time_s) > 20 * measurement.turns[-1].end_s
    states = {
        state
        for turn in measurement.turns
        for time_s, state in zip(track.time_s, track.state, strict=True)
        if turn.start_s < time_s < turn.end_s
    }
    assert "rest" not in states
    for turn in measurement.turns:
        before = track.heading_deg[(track.time_s > turn.start_s - 0.3) & (track.time_s <= turn.start_s)]
        assert abs(before.mean() - turn.start_heading_deg) < WORST_DEG
        assert abs(turn.end_heading_deg - turn.start_heading_deg - turn.heading_change_deg) < 2e-5  # rounding
    for left, right in zip(measurement.turns, measurement.turns[1:], strict=False):
        assert left.end_s < right.start_s


def run(*arguments: object, cwd: Path) -> subprocess.CompletedProcess[str]:
    command = [sys.executable, "-m", "floorswing", *map(str, arguments)]
    return subprocess.run(command, cwd=cwd, capture_output=True, text=True, timeout=300)


@pytest.fixture
def short_clip(tmp_path: Path) -> Path:
    """Return the first seconds of a bundled clip, three turns, with its packets as they are."""
    path = tmp_path / "short.mp4"
    with av.open(CLIPS["lino_mixed"].clip) as whole, av.open(path, "w") as short:
        stream = short.add_stream_from_template(whole.streams.video[0])
        for packet in whole.demux(video=0):
            if packet.pts is not None and packet.pts * packet.time_base < 7.2:
                packet.stream = stream
                short.mux(packet)
    return path


def test_commands_that_do_not_fit_a_real_clip(short_clip: Path, tmp_path: Path):
    trial = tmp_path / "t.toml"
    lines = CLIPS["lino_mixed"].trial.read_text().splitlines()
    trial.write_text("\n".join("wheel_deg = [-285]" if "wheel_deg" in line else line for line in lines))
    result = run("measure", short_clip, "--trial", trial, "--out", "out", cwd=tmp_path)
    assert result.returncode == 2
    assert result.stdout == ""
    assert "3 turns seen, 1 command in the trial, 1 fit" in result.stderr
    assert len(result.stderr.splitlines()) == 1
    assert not (tmp_path / "out").exists()


def test_wrong_ids_and_half_wrong_ids_on_a_real_clip(short_clip: Path, tmp_path: Path):
    """Rounds off the faults that need a real picture: no marker of these ids, and one only."""
    text = CLIPS["lino_mixed"].trial.read_text()
    for fore, aft, words in [(40, 41, "not found"), (0, 41, "only robot marker 0")]:
        trial = tmp_path / f"t{fore}.toml"
        trial.write_text(text.replace("fore = 0", f"fore = {fore}").replace("aft = 1", f"aft = {aft}"))
        result = run("measure", short_clip, "--trial", trial, "--out", "out", cwd=tmp_path)
        assert result.returncode == 1
        assert words in result.stderr
        assert len(result.stderr.splitlines()) == 1
    assert not (tmp_path / "out").exists()


def heed_interrupts() -> None:
    """Undo what shells do to programs in the background: they are made to ignore Ctrl-C, and hand that on."""
    signal.signal(signal.SIGINT, signal.SIG_DFL)


def test_an_interrupted_measurement_leaves_nothing(tmp_path: Path):
    clip = CLIPS["cork_calm"]
    long_clip = tmp_path / "long.mp4"
    lengthen(clip.clip, 600.0, long_clip)
    command = [sys.executable, "-m", "floorswing", "measure", str(long_clip), "--trial", str(clip.trial)]
    with subprocess.Popen(
        [*command, "--out", "out"],
        cwd=tmp_path,
        stdout=subprocess.PIPE,
        stderr=subprocess.PIPE,
        text=True,
        preexec_fn=heed_interrupts,
    ) as process:
        time.sleep(4.0)  # in the middle of ten minutes, which take longer on any machine of today
        os.kill(process.pid, signal.SIGINT)
        stdout, stderr = process.communicate(timeout=60)
    assert process.returncode == 130
    assert stdout == ""
    assert stderr == "Interrupted: nothing was left half-written.\n"
    assert list(tmp_path.iterdir()) == [long_clip]


def test_an_unknown_clip_and_a_used_folder_are_refused(tmp_path: Path):
    result = CliRunner().invoke(cli, ["demo", "--clip", "nonsense", "--out", str(tmp_path / "out")])
    assert result.exit_code == 2
    assert "accepted: cork_calm, lino_mixed and rubber_rough" in result.stderr
    (tmp_path / "used").mkdir()
    (tmp_path / "used" / "notes.txt").write_text("mine")
    result = CliRunner().invoke(cli, ["demo", "--out", str(tmp_path / "used")])
    assert result.exit_code == 2
    assert "--overwrite" in result.stderr
    with pytest.raises(FileError):
        new_folder(tmp_path / "used" / "notes.txt", overwrite=False)
    assert new_folder(tmp_path / "used", overwrite=True) == tmp_path / "used"
    (tmp_path / "empty").mkdir()
    assert new_folder(tmp_path / "empty", overwrite=False) == tmp_path / "empty"


def test_missing_clips_are_said(tmp_path: Path):
    with pytest.raises(FileError, match="install again"):
        demo_clips(tmp_path)
    (tmp_path / "a.mp4").write_bytes(b"")
    with pytest.raises(FileError, match=r"a\.toml"):
        demo_clips(tmp_path)


def test_the_sentence_on_the_truth_counts_what_went_wrong():
    wrong = TruthCheck(n_true=5, n_found=4, n_invented=2, n_right_command=3, n_within=2, rms_deg=0.1234, worst_deg=0.2)
    assert truth_sentence(wrong) == (
        "Against the truth: 4 of 5 turns found, 2 invented, 3 with the right command; heading changes off by "
        "0.12 degrees (root mean square), 0.20 at most; 2 of 4 within their stated 95 % interval."
    )
    nothing = TruthCheck(
        n_true=5, n_found=0, n_invented=0, n_right_command=0, n_within=0, rms_deg=math.nan, worst_deg=math.nan
    )
    assert truth_sentence(nothing) == "Against the truth: 0 of 5 turns found, none invented."
