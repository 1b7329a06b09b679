"""The four files of a clip: exactly the documented columns, and the way back."""

from __future__ import annotations

import json
import math
from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from numpy.testing import assert_allclose, assert_array_equal

from floorswing.columns import TURN_COLUMNS
from floorswing.commands_file import Commands
from floorswing.errors import FileError
from floorswing.files import (
    plain,
    read_events,
    read_heading,
    read_measurement,
    read_turns,
    turns_csv,
    write_measurement,
)
from floorswing.matching import match_clip
from floorswing.records import ClipSource, MeasuredTurn, Measurement
from floorswing.trial import read_trial
from vision.records import Event

from .conftest import clip_result


@pytest.fixture
def measurement(trial_file: Path) -> Measurement:
    trial = replace(
        read_trial(trial_file),
        commands=Commands(wheel_deg=(190, 190, -190.5, -190), factors=(("load", ("0", "1", "2", 'x, "y"')),)),
    )
    driven = Event(start_s=0.5, end_s=1.0, kind="driven", detail="12 mm, straight")
    result = clip_result([90.123456, 90.5, -90.25, -90.125], events=(driven,))
    matched = match_clip(result, trial.commands)
    return Measurement(
        name="cork",
        folder=None,
        source=ClipSource(path=Path("cork.mp4"), sha256="ab" * 32, info=result.clip),
        trial=trial,
        turns=matched.turns,
        events=matched.events,
        track=result.track,
        plane=result.plane,
        budget=result.budget,
        settings={"a": 1},
        versions={"floorswing": "0"},
        warnings=("the light changed",),
    )


def test_the_columns_are_those_documented(measurement: Measurement, tmp_path: Path):
    folder = write_measurement(measurement, tmp_path).folder
    assert folder == tmp_path / "cork"
    assert sorted(path.name for path in folder.iterdir()) == [
        "events.csv",
        "heading.csv",
        "measurement.json",
        "turns.csv",
    ]
    assert (folder / "turns.csv").read_text().splitlines()[0] == (
        "turn,start_s,end_s,commanded_wheel_deg,heading_change_deg,u_heading_change_deg,start_heading_deg,"
        "end_heading_deg,peak_rate_deg_s,overshoot_deg,settle_s,centre_x_mm,centre_y_mm,wander_mm,flags,load"
    )
    assert (folder / "turns.csv").read_text().splitlines()[1] == (
        "1,2.00000,3.00000,190,90.12346,0.02000,0.00000,90.12346,120.000,0.3000,0.2000,4.000,-2.000,,,0"
    )
    assert (folder / "events.csv").read_text().splitlines() == [
        "start_s,end_s,kind,detail",
        '0.50000,1.00000,driven,"12 mm, straight"',
    ]
    assert (folder / "heading.csv").read_text().splitlines()[0] == (
        "time_s,heading_deg,u_heading_deg,x_mm,y_mm,scale,residual_px,state"
    )
    assert (folder / "heading.csv").read_text().splitlines()[4] == "0.30000,,,0.000,0.000,1.000000,0.0300,hidden"


def test_everything_comes_back(measurement: Measurement, tmp_path: Path):
    folder = write_measurement(measurement, tmp_path).folder
    assert folder is not None
    back = read_measurement(folder, with_track=True)
    assert back.name == "cork"
    assert back.source == measurement.source
    assert back.trial == measurement.trial
    assert back.budget == measurement.budget
    assert math.isinf(back.budget[0].degrees_of_freedom)
    assert back.warnings == measurement.warnings
    assert back.plane == {"tilt_deg": 12.5, "cards": {"10": [1.0, None]}}
    assert [turn.factors for turn in back.turns] == [turn.factors for turn in measurement.turns]
    assert_allclose(
        [turn.heading_change_deg for turn in back.turns],
        [turn.heading_change_deg for turn in measurement.turns],
        rtol=0,
        atol=5.001e-6,  # half of the last decimal written
    )
    assert back.turns[2].commanded_wheel_deg == -190.5
    assert math.isnan(back.turns[0].wander_mm)
    assert back.events == measurement.events
    assert back.track is not None
    assert measurement.track is not None
    assert back.track.state == measurement.track.state
    assert_array_equal(np.isnan(back.track.heading_deg), np.isnan(measurement.track.heading_deg))
    assert_allclose(back.track.heading_deg, measurement.track.heading_deg, rtol=0, atol=5.001e-6)


def test_the_track_is_only_read_when_asked_for(measurement: Measurement, tmp_path: Path):
    folder = write_measurement(measurement, tmp_path).folder
    assert folder is not None
    back = read_measurement(folder)
    assert back.track is None
    with pytest.raises(ValueError, match="without its track"):
        write_measurement(back, tmp_path)


def test_json_is_strict(measurement: Measurement, tmp_path: Path):
    folder = write_measurement(measurement, tmp_path).folder
    assert folder is not None

    def refuse(constant: str) -> None:
        raise AssertionError(constant)

    document = json.loads((folder / "measurement.json").read_text(), parse_constant=refuse)
    assert document["clip"]["sha256"] == "ab" * 32
    assert document["trial"]["floor"]["surface"] == "cork tile"


def test_plain_knows_every_kind_of_value():
    assert plain({1: (np.float32(0.5), np.int64(3), np.bool_(True)), "p": Path("a"), "n": float("-inf")}) == {
        "1": [0.5, 3, True],
        "p": "a",
        "n": None,
    }


FLAGS = st.lists(st.text("abcdefghij_", min_size=1, max_size=8), max_size=3).map(tuple)
NUMBERS = st.floats(-1e5, 1e5) | st.just(math.nan)
TEXTS = st.text(st.characters(exclude_categories=["Cs"], exclude_characters="\r\x00"), max_size=10)


@given(
    heading_change_deg=NUMBERS,
    commanded_wheel_deg=st.floats(allow_infinity=False, width=64) | st.just(math.nan),
    flags=FLAGS,
    factor=TEXTS,
)
def test_any_turn_comes_back(
    tmp_path_factory: pytest.TempPathFactory,
    heading_change_deg: float,
    commanded_wheel_deg: float,
    flags: tuple[str, ...],
    factor: str,
):
    rest = dict.fromkeys(set(TURN_COLUMNS) - {"turn", "heading_change_deg", "commanded_wheel_deg", "flags"}, 1.0)
    turn = MeasuredTurn(
        turn=1,
        heading_change_deg=heading_change_deg,
        commanded_wheel_deg=commanded_wheel_deg,
        flags=flags,
        factors={"note": factor},
        **rest,
    )
    path = tmp_path_factory.mktemp("turns") / "turns.csv"
    path.write_text(turns_csv([turn]), encoding="utf-8", newline="")
    (back,) = read_turns(path)
    assert_allclose(back.heading_change_deg, heading_change_deg, rtol=0, atol=5.1e-6, equal_nan=True)
    assert_array_equal(back.commanded_wheel_deg, commanded_wheel_deg)  # printed so that it reads back exactly
    assert back.flags == flags
    assert back.factors == {"note": factor}


def test_minus_nothing_is_printed_as_nothing(measurement: Measurement):
    turn = replace(measurement.turns[0], overshoot_deg=-1e-9)
    assert turns_csv([turn]).splitlines()[1].split(",")[9] == "0.0000"


DAMAGE = {
    "a missing column": (("wander_mm,", ""), "line 1: the column wander_mm is missing"),
    "columns in another order": (
        ("turn,start_s", "start_s,turn"),
        "line 1: the columns are not in their order",
    ),
    "text for a number": (
        ("90.12346", "ninety"),
        "line 2: heading_change_deg is 'ninety', expected a number",
    ),
    "an infinite number": (
        ("90.12346", "inf"),
        "line 2: heading_change_deg is 'inf', expected a finite number",
    ),
    "no turn number": (("\n1,", "\n,"), "line 2: turn is '', expected a whole number"),
    "turn number zero": (("\n1,", "\n0,"), "line 2: turn is 0, expected a whole number from 1"),
    "a short line": (("\n1,", "\n"), "line 2: 15 fields where the header has 16"),
    "an open quote": (("\n1,", '\n"1,'), "not a CSV line"),
}


@pytest.mark.parametrize("damage", DAMAGE)
def test_a_damaged_table_is_refused_with_line_and_column(measurement: Measurement, tmp_path: Path, damage: str):
    folder = write_measurement(measurement, tmp_path).folder
    assert folder is not None
    (old, new), message = DAMAGE[damage]
    path = folder / "turns.csv"
    text = path.read_text()
    assert old in text
    path.write_text(text.replace(old, new))
    with pytest.raises(FileError) as raised:
        read_turns(folder)
    assert str(path) in str(raised.value)
    assert message in str(raised.value)


def test_what_is_not_a_measurement_is_refused(measurement: Measurement, tmp_path: Path):
    with pytest.raises(FileError, match="no such folder"):
        read_measurement(tmp_path / "no")
    with pytest.raises(FileError, match=r"measurement\.json: no such file"):
        read_measurement(tmp_path)
    folder = write_measurement(measurement, tmp_path).folder
    assert folder is not None
    path = folder / "measurement.json"
    good = json.loads(path.read_text())
    for content, message in [
        ("{", "not JSON"),
        ("[]", "not a file that"),
        ('{"kind": "fit"}', "not a file that"),
        (json.dumps({**good, "format": 99}), "format 99"),
        (json.dumps({key: value for key, value in good.items() if key != "trial"}), "does not hold"),
        (json.dumps({**good, "clip": {}}), "does not hold"),
        (json.dumps({**good, "budget": [{"name": 1}]}), "does not hold"),
    ]:
        path.write_text(content)
        with pytest.raises(FileError, match=message):
            read_measurement(folder)


def test_empty_and_binary_tables_are_refused(tmp_path: Path):
    (tmp_path / "events.csv").write_text("")
    with pytest.raises(FileError, match="the file is empty"):
        read_events(tmp_path)
    (tmp_path / "heading.csv").write_bytes(b"\xff\xfe")
    with pytest.raises(FileError, match="not UTF-8"):
        read_heading(tmp_path)
