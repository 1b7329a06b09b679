"""``floorswing measure`` as a user meets it, with the pipeline replaced by made-up results."""

from __future__ import annotations

import json
import os
import sys
from collections.abc import Callable
from pathlib import Path

import pytest
from click.testing import CliRunner, Result

import floorswing
from floorswing.cli import cli
from floorswing.files import read_measurement
from vision.errors import ClipError, MarkersNotFound

from .conftest import Fake, clip_result

GOOD = [90.1, 90.3, -89.9, -90.2]
MakeClip = Callable[[str], Path]


def measure(*arguments: object) -> Result:
    """Run the command in this process alone, where the pipeline is replaced."""
    return CliRunner().invoke(cli, ["measure", "--workers", "1", *map(str, arguments)])


@pytest.fixture
def out(tmp_path: Path) -> Path:
    return tmp_path / "out"


def test_prints_a_table_a_sentence_and_the_folder(fake_pipeline: Fake, clip: MakeClip, trial_file: Path, out: Path):
    fake_pipeline(cork=clip_result(GOOD))
    path = clip("cork.mp4")
    result = measure(path, "--trial", trial_file, "--out", out)
    assert result.exit_code == 0
    assert "   1     2.00       +190     +90.100 ± 0.040" in result.stdout
    assert (
        "cork: 4 turns seen, each with its command; each heading change known to ±0.040 degrees (95 %, "
        "typical turn); turns of the same command scatter by 0.18 degrees (standard deviation, 2 degrees of "
        "freedom).\n"
    ) in result.stdout
    assert f"Written to {out / 'cork'}" in result.stdout
    assert result.stderr == f"Warning: {path}: the light changed\n"


def test_json_is_all_there_is_on_standard_output(fake_pipeline: Fake, clip: MakeClip, trial_file: Path, out: Path):
    fake_pipeline(a=clip_result(GOOD), b=clip_result(GOOD[:3]))
    result = measure(clip("a.mp4"), clip("b.mp4"), "--trial", trial_file, "--out", out, "--json")
    a, b = json.loads(result.stdout)
    assert a["folder"] == str(out / "a")
    assert a["turns"][0]["heading_change_deg"] == 90.1
    assert a["turns"][0]["wander_mm"] is None
    assert b["events"][0]["kind"] == "missing turn"


def test_a_missing_turn_is_said(fake_pipeline: Fake, clip: MakeClip, trial_file: Path, out: Path):
    fake_pipeline(cork=clip_result(GOOD[:3]))
    result = measure(clip("cork.mp4"), "--trial", trial_file, "--out", out)
    assert result.exit_code == 0
    assert "3 turns seen, 3 of them matched to the 4 commands of the trial" in result.stdout
    assert "Warning: " in result.stderr
    assert "no turn seen for command 4" in result.stderr


def failures(result: Result) -> list[str]:
    assert "Traceback" not in result.output
    return [line for line in result.stderr.splitlines() if line.startswith("Error")]


def test_one_failing_clip_is_one_line_and_exit_code_1(fake_pipeline: Fake, clip: MakeClip, trial_file: Path, out: Path):
    a, b = clip("a.mp4"), clip("b.mp4")
    fake_pipeline(a=MarkersNotFound(f"{a}: no marker with id 0 or 1"), b=clip_result(GOOD))
    result = measure(a, b, "--trial", trial_file, "--out", out)
    assert result.exit_code == 1
    assert failures(result) == [f"Error: {a}: no marker with id 0 or 1"]
    assert [path.name for path in out.iterdir()] == ["b"]


def test_no_markers_in_the_only_clip_is_exit_code_1(fake_pipeline: Fake, clip: MakeClip, trial_file: Path, out: Path):
    a = clip("a.mp4")
    fake_pipeline(a=MarkersNotFound("no marker with id 0 or 1"))
    result = measure(a, "--trial", trial_file, "--out", out)
    assert result.exit_code == 1
    assert failures(result) == [f"Error: {a}: no marker with id 0 or 1"]
    assert not out.exists()


def test_a_file_that_is_no_clip_is_exit_code_2(fake_pipeline: Fake, clip: MakeClip, trial_file: Path, out: Path):
    a = clip("a.txt")
    fake_pipeline(a=ClipError("a.txt: not a clip"))
    result = measure(a, "--trial", trial_file, "--out", out)
    assert result.exit_code == 2
    assert failures(result) == [f"Error: {a}: not a clip"]


def test_commands_that_do_not_fit_are_exit_code_2(fake_pipeline: Fake, clip: MakeClip, trial_file: Path, out: Path):
    fake_pipeline(a=clip_result([45.0, -180, 90, 45, -60, -30, 20, 135, 90, 180, 270, -45]))
    result = measure(clip("a.mp4"), "--trial", trial_file, "--out", out)
    assert result.exit_code == 2
    assert len(failures(result)) == 1
    assert "12 turns seen, 4 commands in the trial" in failures(result)[0]
    assert not out.exists()


def test_wrong_paths_are_one_line_and_exit_code_2(fake_pipeline: Fake, clip: MakeClip, trial_file: Path, out: Path):
    a, empty = clip("a.mp4"), out.parent / "empty"
    empty.mkdir()
    for arguments in [
        ("no.mp4", "--trial", trial_file, "--out", out),
        (empty, "--trial", trial_file, "--out", out),
        (a, "--trial", "no.toml", "--out", out),
        (a, "--trial", trial_file, "--out", trial_file),
    ]:
        result = measure(*arguments)
        assert result.exit_code == 2
        assert len(failures(result)) == 1
        assert len(result.stderr.splitlines()) == 1
    assert not out.exists()


def test_an_interruption_is_exit_code_130_and_leaves_nothing(
    fake_pipeline: Fake, clip: MakeClip, trial_file: Path, out: Path
):
    fake_pipeline(a=KeyboardInterrupt())
    result = measure(clip("a.mp4"), "--trial", trial_file, "--out", out)
    assert result.exit_code == 130
    assert result.stderr == "Interrupted: nothing was left half-written.\n"
    assert not out.exists()


def test_nothing_but_the_result_on_standard_output_when_not_a_terminal(
    fake_pipeline: Fake, clip: MakeClip, trial_file: Path, out: Path
):
    fake_pipeline(a=clip_result(GOOD))
    result = measure(clip("a.mp4"), "--trial", trial_file, "--out", out)
    assert "\r" not in result.output
    assert "%|" not in result.output


def test_the_function_writes_what_the_command_writes(
    fake_pipeline: Fake, clip: MakeClip, trial_file: Path, out: Path, tmp_path: Path
):
    fake_pipeline(a=clip_result(GOOD))
    path = clip("a.mp4")
    measure(path, "--trial", trial_file, "--out", out)
    floorswing.measure(path, trial_file, tmp_path / "again")
    for file in sorted((out / "a").iterdir()):
        assert file.read_bytes() == (tmp_path / "again" / "a" / file.name).read_bytes()


@pytest.mark.skipif(sys.platform != "linux", reason="elsewhere the system refuses such a name")
def test_a_clip_whose_name_is_no_text_is_measured(fake_pipeline: Fake, tmp_path: Path, trial_file: Path, out: Path):
    path = tmp_path / os.fsdecode(b"b\xffd.mp4")
    path.write_bytes(b"clip")
    fake_pipeline(**{path.stem: clip_result(GOOD)})
    result = measure(path, "--trial", trial_file, "--out", out, "--json")
    assert result.exit_code == 0, result.output
    (one,) = json.loads(result.stdout)
    assert one["folder"] == str(out / "b_d")
    assert read_measurement(out / "b_d").name == "b_d"


def test_a_link_in_place_of_the_results_is_refused_in_one_line(
    fake_pipeline: Fake, clip: MakeClip, trial_file: Path, out: Path, tmp_path: Path
):
    fake_pipeline(a=clip_result(GOOD))
    outside = tmp_path / "outside"
    for place in (out, outside):
        place.mkdir()
    (out / "a").symlink_to(outside)
    result = measure(clip("a.mp4"), "--trial", trial_file, "--out", out)
    assert result.exit_code != 0
    (said,) = failures(result)
    assert said.endswith(f"is a link to {outside}, outside its folder; remove it or choose another")
    assert list(outside.iterdir()) == []
    assert (out / "a").is_symlink()


def test_a_table_that_is_a_link_is_replaced_and_where_it_led_is_left_alone(
    fake_pipeline: Fake, clip: MakeClip, trial_file: Path, out: Path, tmp_path: Path
):
    fake_pipeline(a=clip_result(GOOD))
    path, precious = clip("a.mp4"), tmp_path / "precious.txt"
    assert measure(path, "--trial", trial_file, "--out", out).exit_code == 0
    asked = (out / "a" / "turns.csv").read_text()
    precious.write_text("precious")
    for name in ("turns.csv", "measurement.json"):
        (out / "a" / name).unlink()
        (out / "a" / name).symlink_to(precious)
    result = measure(path, "--trial", trial_file, "--out", out, "--again")
    assert result.exit_code == 0, result.output
    assert precious.read_text() == "precious"
    assert not any(file.is_symlink() for file in (out / "a").iterdir())
    assert (out / "a" / "turns.csv").read_text() == asked


@pytest.mark.skipif(sys.platform == "win32", reason="there these names are no file names")
@pytest.mark.parametrize("stem", ["..", "...", "-rf", "..\\..\\up", "~", "con", " ", "a\nb", "x" * 240])
def test_a_hostile_file_name_stays_in_the_output_folder(
    fake_pipeline: Fake, tmp_path: Path, trial_file: Path, stem: str
):
    path, out = tmp_path / "in" / f"{stem}.mp4", tmp_path / "deep" / "out"
    path.parent.mkdir()
    path.write_bytes(b"clip")
    fake_pipeline(**{path.stem: clip_result(GOOD)})
    before = {*tmp_path.rglob("*")}
    result = measure(path, "--trial", trial_file, "--out", out)
    assert result.exit_code == 0, result.output
    new = {*tmp_path.rglob("*")} - before
    (folder,) = out.iterdir()
    assert new == {out.parent, out, folder, *folder.iterdir()}
    assert len(list(folder.iterdir())) == 4
    assert folder.name.isprintable()
    assert not folder.name.startswith((".", "-"))


def test_what_the_pictures_do_not_show_can_be_said(fake_pipeline: Fake, clip: MakeClip, trial_file: Path, out: Path):
    a = clip("a.mp4")
    fake_pipeline(a=clip_result([*GOOD[1:2], 33.0, *GOOD[2:3]]))
    said = ("--from-command", "2", "--undriven", "4", "--stray-turns", " 2")
    result = measure(a, "--trial", trial_file, "--out", out, *said)
    assert result.exit_code == 0
    assert result.stderr.endswith(f"Warning: {a}: no command fits turn 2; counted as extra, not used in a fit\n")
    settings = json.loads((out / "a" / "measurement.json").read_text())["settings"]
    assert settings["remedies"] == {"from_command": 2, "undriven": [4], "stray_turns": [2]}


@pytest.mark.parametrize(
    ("said", "answer"),
    [
        (("--undriven", "9"), "command 9 was named, but the trial has 4 commands"),
        (("--from-command", "5"), "command 5 was named"),
        (("--stray-turns", "7"), "turn 7 was named, but 4 turns were seen"),
        (("--undriven", "1,,2"), "accepted: whole numbers from 1"),
        (("--stray-turns", "0"), "accepted: whole numbers from 1"),
        (("--stray-turns", "9" * 5000), "accepted: whole numbers from 1"),
    ],
)
def test_remedies_that_cannot_be(fake_pipeline, clip: MakeClip, trial_file: Path, out: Path, said, answer):
    fake_pipeline(a=clip_result(GOOD))
    result = measure(clip("a.mp4"), "--trial", trial_file, "--out", out, *said)
    assert result.exit_code == 2
    assert answer in " ".join(result.stderr.split())
    assert not out.exists()
