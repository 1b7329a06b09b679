"""From clips to measurements and files, with the pipeline replaced by made-up results."""

from __future__ import annotations

import hashlib
import json
from collections.abc import Callable
from pathlib import Path

import pytest

from floorswing.batch import Batch
from floorswing.errors import CommandsMismatch, FileError, TrialError
from floorswing.fingerprint import sha256_of
from floorswing.measuring import Failure, SomeClipsFailed, measure
from vision.errors import ClipError, MarkersNotFound

from .conftest import Fake, clip_result

GOOD = [90.1, 90.3, -89.9, -90.2]
MakeClip = Callable[[str], Path]


def folders_in(out: Path) -> list[str]:
    return sorted(path.name for path in out.iterdir())


def test_measures_and_writes(fake_pipeline: Fake, clip: MakeClip, trial_file: Path, tmp_path: Path):
    fake_pipeline(cork=clip_result(GOOD))
    (one,) = measure(clip("cork.mp4"), trial_file, tmp_path / "out")
    assert one.folder == tmp_path / "out" / "cork"
    assert [turn.commanded_wheel_deg for turn in one.turns] == [190, 190, -190, -190]
    document = json.loads((one.folder / "measurement.json").read_text())
    assert document["clip"]["sha256"] == hashlib.sha256(b"not a real clip: cork.mp4").hexdigest()
    assert document["settings"]["markers"]["marker_side_mm"] == 40.0
    assert document["settings"]["doubtful_match_below"] == 0.95
    assert {"floorswing", "python", "numpy", "scipy", "av", "opencv-python-headless"} <= set(document["versions"])
    assert "unknown" not in document["versions"].values()
    assert document["plane"]["tilt_deg"] == 12.5
    assert document["budget"][0]["name"] == "rest before"
    assert document["warnings"] == ["the light changed"]
    assert document["trial"]["robot"]["name"] == "shuttle 2"


def test_without_an_output_folder_nothing_is_written(
    fake_pipeline: Fake, clip: MakeClip, trial_file: Path, tmp_path: Path
):
    fake_pipeline(cork=clip_result(GOOD))
    path = clip("cork.mp4")
    before = sorted(tmp_path.iterdir())
    (one,) = measure([path], trial_file)
    assert one.folder is None
    assert sorted(tmp_path.iterdir()) == before


def test_one_failing_clip_does_not_stop_the_others(
    fake_pipeline: Fake, clip: MakeClip, trial_file: Path, tmp_path: Path
):
    fake_pipeline(a=clip_result(GOOD), b=MarkersNotFound("no markers"), c=clip_result(GOOD))
    with pytest.raises(SomeClipsFailed, match=r"1 of 3 clips not measured: .*b\.mp4: no markers") as raised:
        measure([clip("a.mp4"), clip("b.mp4"), clip("c.mp4")], trial_file, tmp_path / "out")
    assert [one.name for one in raised.value.measurements] == ["a", "c"]
    assert folders_in(tmp_path / "out") == ["a", "c"]


def test_the_only_clip_raises_its_own_error(fake_pipeline: Fake, clip: MakeClip, trial_file: Path):
    fake_pipeline(a=MarkersNotFound("no markers"))
    with pytest.raises(MarkersNotFound, match="no markers"):
        measure(clip("a.mp4"), trial_file)


def test_the_same_stem_twice_gets_two_folders(fake_pipeline: Fake, clip: MakeClip, trial_file: Path, tmp_path: Path):
    fake_pipeline(run=clip_result(GOOD))
    measure([clip("a/run.mp4"), clip("b/run.mov")], trial_file, tmp_path / "out")
    assert folders_in(tmp_path / "out") == ["run", "run-2"]
    digests = {
        json.loads((tmp_path / "out" / name / "measurement.json").read_text())["clip"]["sha256"]
        for name in ("run", "run-2")
    }
    assert len(digests) == 2


def test_each_clip_shows_all_commands_unless_they_run_on(fake_pipeline: Fake, clip: MakeClip, trial_file: Path):
    fake_pipeline(a=clip_result(GOOD[:2]), b=clip_result(GOOD[2:]))
    clips = [clip("a.mp4"), clip("b.mp4")]
    apart = measure(clips, trial_file)
    assert [len(one.events) for one in apart] == [2, 2]
    through = measure(clips, trial_file, continued=True)
    assert [[turn.commanded_wheel_deg for turn in one.turns] for one in through] == [[190, 190], [-190, -190]]
    assert [one.events for one in through] == [(), ()]
    assert through[0].settings["commands_continue_across_clips"] is True


def test_commands_that_run_on_past_a_failed_clip(fake_pipeline: Fake, clip: MakeClip, trial_file: Path):
    fake_pipeline(a=clip_result(GOOD[:2]), b=ClipError("torn"), c=clip_result(GOOD[2:]))
    clips = [clip(f"{name}.mp4") for name in "abc"]
    outcomes = list(Batch(clips, trial_file, continued=True).run())
    assert [isinstance(outcome, Failure) for outcome in outcomes] == [False, True, False]


@pytest.mark.parametrize("continued", [False, True])
def test_commands_that_do_not_fit_fail_the_clip(
    fake_pipeline: Fake, clip: MakeClip, trial_file: Path, tmp_path: Path, continued: bool
):
    fake_pipeline(a=clip_result([45.0, -180, 90, 45, -60, -30, 20, 135, 90, 180, 270, -45]))
    with pytest.raises(CommandsMismatch, match="12 turns seen, 4 commands"):
        measure(clip("a.mp4"), trial_file, tmp_path / "out", continued=continued)
    assert not (tmp_path / "out").exists()


def test_what_is_wrong_with_the_call_is_said_before_anything_is_measured(
    fake_pipeline: Fake, clip: MakeClip, trial_file: Path, tmp_path: Path
):
    fake_pipeline(a=AssertionError("measured"))
    a = clip("a.mp4")
    with pytest.raises(FileError, match=r"no\.mp4: no such file"):
        measure([a, tmp_path / "no.mp4"], trial_file)
    (tmp_path / "empty").mkdir()
    with pytest.raises(FileError, match="empty: holds no clip"):
        measure([a, tmp_path / "empty"], trial_file)
    with pytest.raises(FileError, match="workers: 0"):
        measure([a], trial_file, workers=0)
    with pytest.raises(TrialError):
        measure([a], tmp_path / "no.toml")
    with pytest.raises(FileError, match="is not a folder"):
        measure([a], trial_file, trial_file)
    with pytest.raises(FileError, match="no clip"):
        measure([], trial_file)


def test_an_interruption_leaves_what_was_finished_and_no_part(
    fake_pipeline: Fake, clip: MakeClip, trial_file: Path, tmp_path: Path
):
    fake_pipeline(a=clip_result(GOOD), b=KeyboardInterrupt())
    with pytest.raises(KeyboardInterrupt):
        measure([clip("a.mp4"), clip("b.mp4")], trial_file, tmp_path / "out")
    assert folders_in(tmp_path / "out") == ["a"]


def test_an_unwritable_place_for_one_clip_fails_that_clip(
    fake_pipeline: Fake, clip: MakeClip, trial_file: Path, tmp_path: Path
):
    fake_pipeline(a=clip_result(GOOD), b=clip_result(GOOD))
    (tmp_path / "out").mkdir()
    (tmp_path / "out" / "a").write_text("precious")
    with pytest.raises(SomeClipsFailed) as raised:
        measure([clip("a.mp4"), clip("b.mp4")], trial_file, tmp_path / "out")
    assert [failure.is_wrong_file for failure in raised.value.failures] == [True]
    assert (tmp_path / "out" / "a").read_text() == "precious"


def test_progress_is_told_with_the_name_of_the_clip(fake_pipeline: Fake, clip: MakeClip, trial_file: Path):
    fake_pipeline(a=clip_result(GOOD))
    told: list[tuple[str, float]] = []
    measure(clip("a.mp4"), trial_file, progress=lambda name, fraction: told.append((name, fraction)))
    assert told == [("a", 0.5), ("a", 1.0)]


def test_sha256_of_a_known_message(tmp_path: Path):
    """Source: FIPS 180-4's example message "abc" (NIST example values for SHA-256), from memory."""
    (tmp_path / "abc").write_bytes(b"abc")
    assert sha256_of(tmp_path / "abc") == "ba7816bf8f01cfea414140de5dae2223b00361a396177a9cb410ff61f20015ad"
    with pytest.raises(FileError, match="cannot be read"):
        sha256_of(tmp_path / "no")
