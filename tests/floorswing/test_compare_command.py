"""`floorswing compare`, `floorswing plan` and the consistency that `fit` reports, on folders of simulated trials."""

from __future__ import annotations

import json
from pathlib import Path

import click
import numpy as np
import pytest
from click.testing import CliRunner, Result

from floorswing import compare, fit
from floorswing.cli import cli
from floorswing.planning import with_commands
from floorswing.trial import read_trial
from tests.floorswing.conftest import TRIAL
from tests.floorswing.folders import measured


@pytest.fixture(scope="module")
def folders(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """Return a folder with cork (two runs), lino (another gain) and rubber (rough), one run each."""
    out = tmp_path_factory.mktemp("measured")
    for name, seed in (("one", 1), ("two", 2)):
        measured(out / "cork", name, seed, blocks=2)
    measured(out / "lino", "lino", 3, blocks=3, gain=0.50, surface="lino")
    measured(out / "rubber", "rubber", 4, blocks=3, scatter_deg=2.0, surface="rubber mat")
    return out


def run(*arguments: str | Path) -> Result:
    return CliRunner().invoke(cli, [str(one) for one in arguments])


def test_surfaces_are_told_apart_in_words(folders: Path):
    result = run("compare", folders / "cork", folders / "lino", folders / "rubber")
    assert result.exit_code == 0, result.output
    text = result.output
    assert "lino against cork tile at +90 degrees: different, by +3." in text
    assert "command +18" in text
    assert "Spread of rubber mat against cork tile" in text
    assert "different (F test" in text
    assert "All 3 together at +90 degrees: not all alike" in text
    assert "one run only of lino, rubber mat" in text
    row = next(line for line in text.splitlines() if line.startswith("cork tile"))
    assert row.split()[2:4] == ["32", "2"]  # turns and runs; the first of each run is left out


def test_command_and_function_are_one(folders: Path):
    result = run("compare", folders / "cork", folders / "lino", "--angle", "45", "--margin-deg", "0.5", "--json")
    document = json.loads(result.stdout)
    found = compare([folders / "cork", folders / "lino"], wanted_deg=[45.0], margin_deg=0.5)
    assert document["kind"] == "floorswing comparison"
    (pair,) = found.pairs
    assert document["pairs"][0]["heading_deg"]["value"] == pair.heading_deg.value
    assert document["pairs"][0]["verdict"] == pair.verdict
    assert document["margin_deg"] == 0.5
    context = click.Context(cli)
    command = cli.get_command(context, "compare")
    assert command is not None
    margin = next(one for one in command.params if one.name == "margin_deg")
    assert margin.default == compare.__kwdefaults__["margin_deg"]


def test_one_folder_of_several_floors_is_taken_apart(folders: Path, tmp_path: Path):
    for name, surface, gain in (("a", "cork tile", 0.48), ("b", "lino", 0.5)):
        measured(tmp_path, name, 5, blocks=2, surface=surface, gain=gain)
    assert "lino against cork tile at +90 degrees: different" in run("compare", tmp_path).output


def test_values_of_a_column_are_compared(tmp_path: Path):
    folder = measured(tmp_path, "loaded", 6, blocks=6, factor=0.03)
    result = run("compare", folder, "--by", "load")
    assert result.exit_code == 0, result.output
    assert "load full" in result.output
    assert "different, by" in result.output
    wrong = run("compare", folder, "--by", "tyre")
    assert wrong.exit_code == 2
    assert "no column tyre in the turns; the commands files have further columns: load" in wrong.output


@pytest.mark.parametrize(
    ("arguments", "message"),
    [
        (["cork"], "1 to compare; at least two"),
        (["cork", "none"], "no such folder"),
        (["cork", "lino", "--margin-deg", "0"], "--margin-deg: found 0; accepted: degrees above 0"),
        (["cork", "lino", "--angle", "ninety"], "--angle: found 'ninety'; accepted: degrees such as 90"),
        (["cork", "cork"], "given twice"),
    ],
)
def test_wrong_use_of_compare_is_one_line(folders: Path, arguments: list[str], message: str):
    given = [str(folders / one) if not one.startswith("-") and n < 2 else one for n, one in enumerate(arguments)]
    result = run("compare", *given)
    assert result.exit_code == 2
    assert message in " ".join(result.output.split())
    assert "Traceback" not in result.output


def test_fit_reports_the_consistency(folders: Path, tmp_path: Path):
    out = tmp_path / "fit.json"
    result = run("fit", folders / "cork", "--out", out)
    assert result.exit_code == 0, result.output
    for words in ("off the relation, deg", "Repeats of one command scatter by", "; runs by", "Looked for and not seen"):
        assert words in result.output
    block = json.loads(out.read_text())["consistency"]
    assert [check["name"] for check in block["checks"]][:4] == ["runs", "drift", "neighbours", "grain"]
    assert block["runs"]["repeatability"]["low"] < 0.5 < block["runs"]["repeatability"]["high"]
    assert len(block["commands"]) == 8
    assert block["grain"][0]["frame"] == "one"


def test_what_is_seen_is_said_with_its_size(tmp_path: Path):
    folder = measured(tmp_path, "warped", 7, blocks=6, grain=0.04, axis_deg=60.0)
    text = run("fit", folder, "--out", tmp_path / "fit.json").output
    assert "adjusted): grain of the floor: the gain is" in text
    assert "of the floor frame of warped" in text
    folder = measured(tmp_path, "drifting", 8, blocks=6, drift_deg=0.1)
    assert "adjusted): drift: +0." in run("fit", folder, "--out", tmp_path / "fit.json").output
    folder = measured(tmp_path, "sloping", 8, blocks=6, slope_per_m=0.08)
    assert "a slope of the gain over the floor: the gain rises by" in run("fit", folder).output
    folder = measured(tmp_path, "loaded", 8, blocks=6, factor=0.05)
    assert "dependence on load: " in run("fit", folder).output


def test_wanted_angles_of_the_commands_are_what_trueness_is_held_against(tmp_path: Path):
    folder = measured(tmp_path, "wanted", 9, blocks=2)
    path = folder / "turns.csv"
    lines = path.read_text().splitlines()
    signs = [float(line.split(",")[3]) for line in lines[1:]]
    path.write_text("\n".join([lines[0] + ",wanted_deg", *(f"{row},{np.sign(s) * 72:g}" for row, s in
                                                              zip(lines[1:], signs, strict=True))]) + "\n")  # fmt: skip
    text = run("fit", folder).output
    assert "off the wanted angle, deg" in text
    result = fit(folder)
    assert result.consistency is not None
    assert all(cell.wanted_is_given for cell in result.consistency.cells)
    assert not result.consistency.factors or "wanted_deg" not in [one.name for one in result.consistency.factors]


def test_a_plan_is_a_run_card_and_a_trial_file(tmp_path: Path, trial_file: Path):
    out = tmp_path / "planned.toml"
    result = run("plan", "--trial", trial_file, "--scatter-deg", "0.5", "--mean-deg", "0.4", "--out", out)
    assert result.exit_code == 0, result.output
    planned = read_trial(out)
    assert planned.robot == read_trial(trial_file).robot
    assert planned.floor == read_trial(trial_file).floor
    card = [line for line in result.output.splitlines() if line.endswith("[ ]")]
    assert [float(line.split()[1]) for line in card] == list(planned.commands.wheel_deg)
    assert len(card) == 1 + 4 * 7
    document = json.loads(run("plan", "--trial", trial_file, "--repeats", "7", "--json").stdout)
    assert [one["wheel_deg"] for one in document["turns"]] == list(planned.commands.wheel_deg)
    assert "D-efficiency" in result.output


def test_plan_says_what_a_first_batch_lacks(folders: Path):
    result = run("plan", "--after", folders / "lino", "--repeats", "5")
    assert result.exit_code == 0, result.output
    rows = [line.split() for line in result.output.splitlines() if line.startswith(("+150", "-150", "+220", "-220"))]
    assert all(int(row[-2]) + int(row[-1]) == 5 for row in rows)
    assert "17 more turns: one to begin with, then 2 more of every combination" in result.output
    enough = run("plan", "--after", folders / "lino", "--repeats", "2")
    assert "Nothing is missing: every combination was driven 2 times or more." in enough.output
    widths = run("plan", "--after", folders / "lino", "--mean-deg", "0.4")
    assert "(seen in the first batch)" in widths.output


@pytest.mark.parametrize(
    ("arguments", "message"),
    [
        ([], "no command to plan: give --wheel-deg"),
        (["--wheel-deg", "190", "--mean-deg", "0.1"], "--scatter-deg: missing"),
        (["--wheel-deg", "x"], "--wheel-deg: found 'x'"),
        (["--wheel-deg", "190", "--mean-deg", "-1"], "--mean-deg: found -1; accepted: a number above 0"),
        (["--wheel-deg", "190", "--spread-share", "2"], "--spread-share: found 2; accepted: above 0 and below 1"),
        (["--wheel-deg", "190", "--out", "p.toml"], "give --trial FILE"),
        (["--wheel-deg", "190", "--scatter-deg", "1", "--mean-deg", "0.001"], "ask for less certainty"),
        (["--trial", "none.toml"], "none.toml"),
    ],
)
def test_wrong_use_of_plan_is_one_line(arguments: list[str], message: str):
    result = run("plan", *arguments)
    assert result.exit_code == 2
    assert message in " ".join(result.output.split())
    assert "Traceback" not in result.output


@pytest.mark.parametrize(
    "text",
    [
        TRIAL,
        TRIAL.replace("wheel_deg = [190, 190, -190, -190]", 'file = "commands.csv"  # elsewhere'),
        TRIAL.split("[commands]")[0],
        "[commands]\nwheel_deg = [\n  190,\n  -190,\n]\n\n" + TRIAL.split("[commands]")[0],
    ],
    ids=["list", "file", "none", "first, over several lines"],
)
def test_commands_are_replaced_and_nothing_else(tmp_path: Path, text: str):
    path = tmp_path / "new.toml"
    path.write_text(with_commands(text, [95.0, -95.5]), encoding="utf-8")
    trial = read_trial(path)
    assert trial.commands.wheel_deg == (95.0, -95.5)
    assert (trial.robot.name, trial.floor.surface, trial.markers.cards) == ("shuttle 2", "cork tile", (10, 29))


def test_a_first_batch_too_small_to_tell_the_scatter(tmp_path: Path):
    folder = measured(tmp_path, "short", 1, wheel_deg=[190.0, 190.0])
    result = run("plan", "--after", folder, "--mean-deg", "0.5")
    assert result.exit_code == 2
    assert "the first batch does not tell it (2 usable turns" in result.output
    given = run("plan", "--after", folder, "--mean-deg", "0.5", "--scatter-deg", "0.5")
    assert given.exit_code == 0
    (row,) = (line.split() for line in given.output.splitlines() if line.startswith("+190     same way"))
    assert row[-2] == "1"
    assert int(row[-1]) > 1
