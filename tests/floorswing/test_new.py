"""``floorswing new``: the file it writes, its questions, its refusals."""

from __future__ import annotations

import tomllib
from pathlib import Path

import pytest
from click.testing import CliRunner, Result
from hypothesis import given
from hypothesis import strategies as st

from floorswing.cli import cli
from floorswing.new_trial import QUESTIONS, as_toml, length_mm, trial_text, wheel_degrees
from floorswing.trial import read_trial, trial_from_text

ALL = {
    "--robot-name": "shuttle 2",
    "--wheel-diameter-mm": "64",
    "--inner-track-mm": "118,5",
    "--tyre-width-mm": "20 mm",
    "--marker-side-mm": "39.2",
    "--surface": 'cork "tile"',
    "--card-side-mm": "60",
    "--wheel-deg": "190, 190; -190 -190.5",
}
NEEDED = {
    name: value for name, value in ALL.items() if name not in ("--inner-track-mm", "--tyre-width-mm", "--card-side-mm")
}


def new(path: Path, options: dict[str, str], *more: str, typed: str | None = None) -> Result:
    arguments = [part for pair in options.items() for part in pair]
    return CliRunner().invoke(cli, ["new", str(path), *arguments, *more], input=typed)


def test_options_make_a_file_that_says_the_same(tmp_path: Path):
    path = tmp_path / "trial.toml"
    result = new(path, ALL)
    assert result.exit_code == 0, result.output
    assert result.stdout == f'Wrote {path}: shuttle 2 on cork "tile", 4 commands.\n'
    trial = read_trial(path)
    assert trial.robot.wheel_diameter_mm == 64.0
    assert trial.robot.inner_track_mm == 118.5
    assert trial.robot.tyre_width_mm == 20.0
    assert trial.robot.marker_side_mm == 39.2
    assert trial.floor.surface == 'cork "tile"'
    assert trial.floor.card_side_mm == 60.0
    assert trial.commands.wheel_deg == (190, 190, -190, -190.5)
    assert trial.markers.dictionary == "APRILTAG_36h11"


def test_every_line_is_commented_and_every_comment_that_is_a_key_would_be_accepted(tmp_path: Path):
    path = tmp_path / "trial.toml"
    assert new(path, NEEDED).exit_code == 0
    text = path.read_text()
    for question in QUESTIONS:
        assert question.explain in text
    uncommented = "\n".join(line.removeprefix("# ") if " = " in line else line for line in text.splitlines())
    trial = trial_from_text(uncommented, path)
    assert trial.robot.inner_track_mm == 118.0
    assert trial.markers.cards == (10, 29)


def test_what_is_missing_is_named_when_nobody_can_be_asked(tmp_path: Path):
    result = new(tmp_path / "t.toml", {"--robot-name": "a"})
    assert result.exit_code == 2
    assert result.stderr == (
        "Error: --wheel-diameter-mm, --marker-side-mm, --surface and --wheel-deg missing; "
        "give them, or run this in a terminal to be asked\n"
    )
    assert not (tmp_path / "t.toml").exists()


@pytest.mark.parametrize(
    ("option", "value", "words"),
    [
        ("--wheel-diameter-mm", "-3", "above 0"),
        ("--wheel-diameter-mm", "wide", "above 0"),
        ("--wheel-diameter-mm", "nan", "above 0"),
        ("--marker-side-mm", "1e9", "up to 5000"),
        ("--surface", "  ", "not blank"),
        ("--surface", "a\nb", "on one line"),
        ("--wheel-deg", "", "such as 190 190 -190 -190"),
        ("--wheel-deg", "190 0", "other than 0"),
        ("--wheel-deg", "190 x", "other than 0"),
        ("--wheel-deg", "99999", "36000"),
    ],
)
def test_nonsense_is_refused_with_what_is_accepted(tmp_path: Path, option: str, value: str, words: str):
    result = new(tmp_path / "t.toml", {**ALL, option: value})
    assert result.exit_code == 2
    assert result.stderr.startswith(f"Error: {option}: found ")
    assert words in result.stderr
    assert len(result.stderr.splitlines()) == 1
    assert not (tmp_path / "t.toml").exists()


def test_it_never_overwrites_untold(tmp_path: Path):
    path = tmp_path / "t.toml"
    path.write_text("precious")
    result = new(path, ALL)
    assert result.exit_code == 2
    assert "--overwrite" in result.stderr
    assert path.read_text() == "precious"
    assert new(path, ALL, "--overwrite").exit_code == 0
    assert read_trial(path).robot.name == "shuttle 2"


def test_in_a_terminal_it_asks_and_asks_again(tmp_path: Path, monkeypatch: pytest.MonkeyPatch):
    monkeypatch.setattr("floorswing.commands.new.is_conversation", lambda: True)
    path = tmp_path / "t.toml"
    typed = "shuttle 2\n0\n64\n\n20\n40\n\nlino\n\n190 -190\n"
    result = new(path, {}, typed=typed)
    assert result.exit_code == 0, result.output
    assert "found '0'; accepted: a number above 0" in result.stdout
    for question in QUESTIONS:
        assert question.explain[1:] in result.stdout
    trial = read_trial(path)
    assert trial.robot.inner_track_mm is None
    assert trial.robot.tyre_width_mm == 20.0
    assert trial.floor.surface == "lino"
    assert trial.floor.card_side_mm is None


def test_in_a_terminal_options_are_not_asked_again(tmp_path: Path, monkeypatch: pytest.MonkeyPatch):
    monkeypatch.setattr("floorswing.commands.new.is_conversation", lambda: True)
    result = new(tmp_path / "t.toml", ALL, typed="")
    assert result.exit_code == 0, result.output
    assert result.stdout.startswith("Wrote ")


def test_the_end_of_the_input_stops_the_questions(tmp_path: Path, monkeypatch: pytest.MonkeyPatch):
    monkeypatch.setattr("floorswing.commands.new.is_conversation", lambda: True)
    result = new(tmp_path / "t.toml", {}, typed="shuttle 2\n")
    assert result.exit_code == 130
    assert "Traceback" not in result.output
    assert not (tmp_path / "t.toml").exists()


@given(st.text(st.characters(exclude_categories=["Cs"])))
def test_any_printable_text_survives(words: str):
    answers = {("robot", "name"): words or "x"}
    text = f"name = {as_toml(words)}"
    if words.isprintable():
        assert tomllib.loads(text)["name"] == words
    assert trial_text(answers).startswith("#")


@given(st.floats(0.001, 5000.0))
def test_any_length_survives(number: float):
    assert length_mm(repr(number)) == number
    assert float(as_toml(number)) == number


@given(st.lists(st.integers(-36_000, 36_000).filter(bool), min_size=1))
def test_any_commands_survive(numbers: list[int]):
    assert wheel_degrees(" ".join(map(str, numbers))) == tuple(numbers)
    assert wheel_degrees(as_toml(tuple(map(float, numbers)))) == tuple(numbers)
