"""`floorswing command` on a fit of a simulated trial: what it prints, its JSON, and what it refuses."""

from __future__ import annotations

import json
from pathlib import Path

import pytest
from click.testing import CliRunner, Result

from calib.command import command_for
from calib.landing import closure, hit_rate, tolerance_band
from floorswing import fit
from floorswing.cli import cli
from floorswing.fitting import read_fit
from tests.floorswing.folders import measured


@pytest.fixture(scope="module")
def fit_file(tmp_path_factory: pytest.TempPathFactory) -> Path:
    folder = tmp_path_factory.mktemp("measured")
    fit(measured(folder, "cork", 1, blocks=2), folder / "fit.json")
    return folder / "fit.json"


def run(*arguments: str | Path) -> Result:
    return CliRunner().invoke(cli, ["command", *(str(one) for one in arguments)])


def test_the_table_gives_both_starts_and_marks_an_extrapolation(fit_file: Path):
    text = run("--fit", fit_file, "90", "--", "-4000").output
    assert "same way" in text
    assert "reversed" in text
    assert "95 % of turns land in (95 % sure)" in text
    lines = text.splitlines()
    assert not any("*" in line for line in lines if line.startswith("+90"))
    assert all("*" in line for line in lines if line.startswith("-4000"))
    assert lines[-1].endswith("an extrapolation.")


def test_json_has_what_the_library_says(fit_file: Path):
    result = run("--fit", fit_file, "--within", "1", "--turns", "4", "--share", "0.9", "--json", "90")
    same_way, reversed_ = json.loads(result.output)
    command = command_for(read_fit(fit_file), 90.0)
    band = tolerance_band(command, 0.9)
    assert same_way["start"] == "same way"
    assert same_way["wheel_deg"] == command.wheel_deg.value
    assert [same_way["low_wheel_deg"], same_way["high_wheel_deg"]] == [command.wheel_deg.low, command.wheel_deg.high]
    assert [same_way["tolerance_low_deg"], same_way["tolerance_high_deg"]] == [band.low_deg, band.high_deg]
    assert same_way["hit_rate"]["low"] == hit_rate(command, 1.0).low
    assert same_way["closure"]["high_deg"] == closure(command, 4).high_deg
    assert same_way["extrapolated"] is False
    assert reversed_["wheel_deg"] > same_way["wheel_deg"]  # the dead band comes on top


def test_more_confidence_and_a_larger_share_widen(fit_file: Path):
    def ends(*options: str) -> tuple[float, float]:
        one = json.loads(run("--fit", fit_file, *options, "--json", "90").output)[0]
        return one["high_wheel_deg"] - one["low_wheel_deg"], one["tolerance_high_deg"] - one["tolerance_low_deg"]

    plain, sure, most = ends(), ends("--confidence", "0.99"), ends("--share", "0.99")
    assert sure[0] > plain[0]
    assert sure[1] > plain[1]
    assert most[0] == plain[0]
    assert most[1] > plain[1]


@pytest.mark.parametrize(
    ("arguments", "said"),
    [
        (["abc"], "accepted: degrees such as 90 or -45"),
        (["0"], "degrees other than 0"),
        (["90", "--within", "0"], "--within"),
        (["90", "--turns", "0"], "--turns"),
        (["90", "--share", "1"], "--share"),
    ],
)
def test_what_cannot_be_asked_is_refused_in_a_line(fit_file: Path, arguments: list[str], said: str):
    result = run("--fit", fit_file, *arguments)
    assert result.exit_code == 2
    assert said in result.output


def test_a_missing_fit_says_what_writes_one(tmp_path: Path):
    result = run("--fit", tmp_path / "fit.json", "90")
    assert result.exit_code == 2
    assert "give the fit.json that `floorswing fit` wrote" in result.output
