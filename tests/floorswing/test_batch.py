"""Many clips: results kept, failures apart, killed and taken up again; real clips of five seconds each."""

from __future__ import annotations

import json
import os
import signal
import subprocess
import sys
import time
from collections.abc import Callable
from pathlib import Path

import pytest
from click.testing import CliRunner

import floorswing
import floorswing.fingerprint
from bench.clips import shorten
from floorswing.batch import Batch, Kept
from floorswing.cli import cli
from floorswing.clip_job import ClipJob, Failure, ProgramError, do_clip
from floorswing.demo_clips import demo_clips
from floorswing.fingerprint import program
from floorswing.records import Measurement
from floorswing.trial import read_trial

from .conftest import Fake, clip_result

GOOD = [90.1, 90.3, -89.9, -90.2]
MakeClip = Callable[[str], Path]


def stamp(out: Path, name: str) -> tuple[int, int]:
    """Return what changes whenever the results of a clip are written again."""
    status = (out / name / "measurement.json").stat()
    return status.st_ino, status.st_mtime_ns


# -- in this process, with the pipeline replaced ------------------------------------------------------------------


def kinds(batch: Batch) -> dict[str, type]:
    return {outcome.name: type(outcome) for outcome in batch.run()}


def test_what_was_measured_with_nothing_changed_is_kept(
    fake_pipeline: Fake, clip: MakeClip, trial_file: Path, tmp_path: Path
):
    fake_pipeline(a=clip_result(GOOD), b=clip_result(GOOD))
    out, clips = tmp_path / "out", [clip("a.mp4"), clip("b.mp4")]
    assert kinds(Batch(clips, trial_file, out)) == {"a": Measurement, "b": Measurement}
    before = stamp(out, "a")
    assert kinds(Batch(clips, trial_file, out)) == {"a": Kept, "b": Kept}
    clips[1].write_bytes(b"another clip of the same name")
    assert kinds(Batch(clips, trial_file, out)) == {"a": Kept, "b": Measurement}
    assert stamp(out, "a") == before
    assert kinds(Batch(clips, trial_file, out, sparse=True)) == {"a": Measurement, "b": Measurement}
    assert kinds(Batch(clips, trial_file, out, sparse=True, again=True)) == {"a": Measurement, "b": Measurement}
    trial_file.write_text(trial_file.read_text().replace('"cork tile"', '"lino"'))
    assert kinds(Batch(clips, trial_file, out, sparse=True)) == {"a": Measurement, "b": Measurement}


def test_another_program_measures_anew(
    fake_pipeline: Fake, clip: MakeClip, trial_file: Path, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
):
    fake_pipeline(a=clip_result(GOOD))
    a, out = clip("a.mp4"), tmp_path / "out"
    assert kinds(Batch([a], trial_file, out)) == {"a": Measurement}
    monkeypatch.setattr("floorswing.fingerprint.__version__", "9.9")
    floorswing.fingerprint._versions.cache_clear()
    assert kinds(Batch([a], trial_file, out)) == {"a": Measurement}
    floorswing.fingerprint._versions.cache_clear()


@pytest.mark.parametrize("damage", ["turns.csv", "heading.csv", "measurement.json"])
def test_results_that_cannot_be_read_are_measured_anew(
    fake_pipeline: Fake, clip: MakeClip, trial_file: Path, tmp_path: Path, damage: str
):
    fake_pipeline(a=clip_result(GOOD))
    a, out = clip("a.mp4"), tmp_path / "out"
    kinds(Batch([a], trial_file, out))
    if damage == "heading.csv":
        (out / "a" / damage).unlink()
    else:
        (out / "a" / damage).write_text("torn")
    assert kinds(Batch([a], trial_file, out)) == {"a": Measurement}


def test_commands_that_run_on_are_kept_together_or_not_at_all(
    fake_pipeline: Fake, clip: MakeClip, trial_file: Path, tmp_path: Path
):
    fake_pipeline(a=clip_result(GOOD[:2]), b=clip_result(GOOD[2:]))
    out, clips = tmp_path / "out", [clip("a.mp4"), clip("b.mp4")]
    assert set(kinds(Batch(clips, trial_file, out, continued=True)).values()) == {Measurement}
    assert set(kinds(Batch(clips, trial_file, out, continued=True)).values()) == {Kept}
    clips[1].write_bytes(b"filmed again")
    assert set(kinds(Batch(clips, trial_file, out, continued=True)).values()) == {Measurement}


def test_the_function_gives_kept_results_with_their_track(
    fake_pipeline: Fake, clip: MakeClip, trial_file: Path, tmp_path: Path
):
    fake_pipeline(a=clip_result(GOOD))
    a = clip("a.mp4")
    (first,) = floorswing.measure(a, trial_file, tmp_path / "out")
    (kept,) = floorswing.measure(a, trial_file, tmp_path / "out")
    assert kept.track is not None
    assert first.track is not None
    assert len(kept.track.time_s) == len(first.track.time_s)
    assert [turn.heading_change_deg for turn in kept.turns] == GOOD


def test_a_fault_of_the_program_fails_its_clip_alone(
    fake_pipeline: Fake, clip: MakeClip, trial_file: Path, tmp_path: Path
):
    fake_pipeline(a=ZeroDivisionError("oh"), b=clip_result(GOOD))
    first, second = Batch([clip("a.mp4"), clip("b.mp4")], trial_file, tmp_path / "out").run()
    assert isinstance(first, Failure)
    assert "conftest.py, line" in str(first.error)
    assert "ZeroDivisionError: oh" in str(first.error)
    assert isinstance(second, Measurement)


def test_another_program_on_the_worker_is_refused(clip: MakeClip, trial_file: Path):
    setup = read_trial(trial_file).marker_setup()
    job = ClipJob(
        name="a", clip=clip("a.mp4"), setup=setup, sparse=False, threads=1, asked="", known="", asked_by="other"
    )
    outcome = do_clip(job, lambda fraction: None)
    assert isinstance(outcome, Failure)
    assert isinstance(outcome.error, ProgramError)
    assert program() != "other"


def test_the_end_of_a_batch_is_a_table_with_the_failures_first(
    fake_pipeline: Fake, clip: MakeClip, trial_file: Path, tmp_path: Path
):
    fake_pipeline(a=clip_result(GOOD), b=ZeroDivisionError("oh"), c=clip_result(GOOD[:3]))
    for name in "abc":
        clip(f"clips/{name}.mp4")
    arguments = ["measure", tmp_path / "clips", "--trial", trial_file, "--out", tmp_path / "out", "--workers", 1]
    CliRunner().invoke(cli, list(map(str, arguments)))
    result = CliRunner().invoke(cli, list(map(str, arguments)))
    assert result.exit_code == 1
    lines = result.stdout.splitlines()
    start = lines.index("3 clips: 1 failed, 2 measured (2 of them before)")
    assert lines[start + 1].startswith("  b  failed ")
    assert lines[start + 2] == "  a  measured  4 turns, 1 warning"
    assert lines[start + 3].startswith("  c  measured  3 turns, ")
    assert len(lines) == start + 4
    assert len([line for line in result.stderr.splitlines() if line.startswith("Error")]) == 1


def test_workers_and_a_scheduler_are_too_much(trial_file: Path, tmp_path: Path):
    arguments = ["measure", "a", "--trial", str(trial_file), "--out", str(tmp_path), "--workers", "2"]
    result = CliRunner().invoke(cli, [*arguments, "--scheduler", "tcp://127.0.0.1:1"])
    assert result.exit_code == 2
    assert "give one of them" in result.stderr


# -- real clips in real processes ----------------------------------------------------------------------------------


@pytest.fixture(scope="module")
def short_clips(tmp_path_factory: pytest.TempPathFactory) -> tuple[Path, Path]:
    """Return a folder of four clips of two turns and one damaged clip, and their trial file."""
    (lino,) = (one for one in demo_clips() if one.name == "lino_mixed")
    folder = tmp_path_factory.mktemp("short")
    clips = folder / "clips"
    clips.mkdir()
    shorten(lino.clip, 5.0, clips / "a.mp4")
    content = (clips / "a.mp4").read_bytes()
    for name in ("b", "c", "d"):
        (clips / f"{name}.mp4").write_bytes(content)
    (clips / "torn.mp4").write_bytes(bytes(4096) + content[4096:])
    trial = folder / "trial.toml"
    said = lino.trial.read_text(encoding="utf-8").split("[commands]")[0]
    trial.write_text(f"{said}[commands]\nwheel_deg = [95, 190]\n", encoding="utf-8")
    return clips, trial


def command(clips: Path, trial: Path, out: Path, *more: str) -> list[str]:
    start = [sys.executable, "-m", "floorswing", "measure", str(clips), "--trial", str(trial), "--out", str(out)]
    return [*start, *more]


@pytest.mark.slow
@pytest.mark.skipif(os.name == "nt", reason="there is no SIGKILL")
def test_a_batch_killed_twice_measures_every_clip_once(short_clips: tuple[Path, Path], tmp_path: Path):
    clips, trial = short_clips
    out = tmp_path / "out"
    stamps: dict[str, tuple[int, int]] = {}

    def finished() -> list[str]:
        return [name for name in "abcd" if (out / name / "measurement.json").exists()]

    for n_wanted, signal_sent in ((1, signal.SIGKILL), (2, signal.SIGINT)):
        run = subprocess.Popen(
            command(clips, trial, out, "--workers", "2"), stdout=subprocess.DEVNULL, stderr=subprocess.DEVNULL
        )
        until_s = time.monotonic() + 60.0
        while len(finished()) < n_wanted and run.poll() is None and time.monotonic() < until_s:
            time.sleep(0.02)
        run.send_signal(signal_sent)
        code = run.wait(timeout=30)
        assert code in {-signal.SIGKILL, 130, 1}
        for name in finished():
            assert stamps.setdefault(name, stamp(out, name)) == stamp(out, name)
    done = subprocess.run(command(clips, trial, out, "--workers", "2"), capture_output=True, text=True, timeout=120)
    assert done.returncode == 1
    assert f"5 clips: 1 failed, 4 measured ({len(stamps)} of them before)" in done.stdout
    assert "torn.mp4: cannot be read as a clip" in done.stderr
    assert finished() == list("abcd")
    assert sorted(path.name for path in out.iterdir()) == list("abcd")
    for name, before in stamps.items():
        assert stamp(out, name) == before


@pytest.mark.slow
def test_workers_give_what_one_process_gives(short_clips: tuple[Path, Path], tmp_path: Path):
    clips, trial = short_clips
    pair = [clips / "a.mp4", clips / "b.mp4"]
    told: set[str] = set()
    alone = floorswing.measure(pair[0], trial)
    side_by_side = floorswing.measure(pair, trial, tmp_path / "out", workers=2, progress=lambda name, _: told.add(name))
    assert [one.name for one in side_by_side] == ["a", "b"]
    for one in side_by_side:
        for turn, same in zip(one.turns[:2], alone[0].turns[:2], strict=True):
            # The order of sums differs between processes; a hundredth of the uncertainty is far more than that.
            assert abs(turn.heading_change_deg - same.heading_change_deg) < 1e-4
    assert told == {"a", "b"}
    document = json.loads((tmp_path / "out" / "a" / "measurement.json").read_text())
    assert document["settings"]["fingerprint"]
