"""The trial file: what is accepted, and that every fault is named."""

from __future__ import annotations

from pathlib import Path

import cv2
import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from floorswing.errors import TrialError
from floorswing.trial import Trial, dictionary_sizes, read_trial, trial_from_dict

from .conftest import TRIAL


def written(tmp_path: Path, text: str) -> Path:
    path = tmp_path / "t.toml"
    path.write_text(text, encoding="utf-8")
    return path


@pytest.mark.parametrize(("text", "value_s"), [("28.0", 28e-6), ("0", 0.0), ("-5", -5e-6)])
def test_a_line_delay_is_read(tmp_path: Path, text: str, value_s: float):
    trial = read_trial(written(tmp_path, f"{TRIAL}[camera]\nline_delay_us = {text}\n"))
    assert trial.marker_setup().line_delay_s == pytest.approx(value_s)
    assert trial_from_dict(trial.as_dict()) == trial


def test_without_a_line_delay_it_is_to_be_estimated(trial_file: Path):
    assert read_trial(trial_file).marker_setup().line_delay_s is None


@pytest.mark.parametrize("text", ['"fast"', "300", "-200", "nan", "true"])
def test_an_impossible_line_delay_is_refused(tmp_path: Path, text: str):
    with pytest.raises(TrialError, match="line_delay_us"):
        read_trial(written(tmp_path, f"{TRIAL}[camera]\nline_delay_us = {text}\n"))


def test_reads_every_key(trial_file: Path):
    trial = read_trial(trial_file)
    assert trial.robot.name == "shuttle 2"
    assert trial.robot.wheel_diameter_mm == 64.0
    assert trial.robot.inner_track_mm == 118.0
    assert trial.robot.tyre_width_mm == 20.0
    assert trial.floor.surface == "cork tile"
    assert trial.commands.wheel_deg == (190.0, 190.0, -190.0, -190.0)
    setup = trial.marker_setup()
    assert (setup.dictionary, setup.fore_id, setup.aft_id) == ("APRILTAG_36h11", 0, 1)
    assert setup.card_ids == tuple(range(10, 30))
    assert (setup.marker_side_mm, setup.card_side_mm) == (40.0, 60.0)


MINIMAL = """
[robot]
name = "shuttle 2"
wheel_diameter_mm = 64
marker_side_mm = 40
[floor]
surface = "lino"
[commands]
wheel_deg = [200]
"""


def test_optional_keys_have_the_documented_defaults(tmp_path: Path):
    trial = read_trial(written(tmp_path, MINIMAL))
    assert trial.robot.inner_track_mm is None
    assert trial.robot.tyre_width_mm is None
    assert trial.floor.card_side_mm is None
    setup = trial.marker_setup()
    assert (setup.dictionary, setup.fore_id, setup.aft_id) == ("APRILTAG_36h11", 0, 1)
    assert setup.card_ids == ()  # no side, no cards


def test_without_cards_their_default_ids_are_free_for_the_robot(tmp_path: Path):
    text = MINIMAL + "[markers]\nfore = 12\naft = 13\n"
    assert read_trial(written(tmp_path, text)).marker_setup().fore_id == 12


def test_survives_the_way_through_json(trial_file: Path):
    trial = read_trial(trial_file)
    assert trial_from_dict(trial.as_dict()) == trial


def test_a_byte_order_mark_and_windows_line_ends_are_read(tmp_path: Path):
    path = tmp_path / "t.toml"
    path.write_bytes(b"\xef\xbb\xbf" + TRIAL.replace("\n", "\r\n").encode())
    assert read_trial(path).robot.name == "shuttle 2"


FAULTS = {
    "unknown key": (
        "tyre_width_mm = 20.0",
        "tire_width_mm = 20.0",
        "[robot] tire_width_mm",
        "did you mean tyre_width_mm?",
    ),
    "unknown table": ("[floor]", "[flor]\nx = 1\n[floor]", "flor", "did you mean floor?"),
    "missing key": ("wheel_diameter_mm = 64.0", "", "[robot] wheel_diameter_mm", "missing"),
    "missing table": ('[floor]\nsurface = "cork tile"\ncard_side_mm = 60.0', "", "[floor]", "missing"),
    "text for number": ("= 64.0", '= "64 mm"', "[robot] wheel_diameter_mm", 'found a text, "64 mm"'),
    "number for text": ('"cork tile"', "7", "[floor] surface", "found a whole number, 7"),
    "true for number": ("= 64.0", "= true", "[robot] wheel_diameter_mm", "found true/false, true"),
    "negative": ("= 64.0", "= -64.0", "[robot] wheel_diameter_mm", "above 0"),
    "zero": ("marker_side_mm = 40.0", "marker_side_mm = 0", "[robot] marker_side_mm", "above 0"),
    "not a number": ("= 64.0", "= nan", "[robot] wheel_diameter_mm", "found nan"),
    "infinite": ("= 64.0", "= inf", "[robot] wheel_diameter_mm", "found inf"),
    "huge": ("= 64.0", "= 1e9", "[robot] wheel_diameter_mm", "up to 5000"),
    "overflow": ("= 64.0", f"= 1{'0' * 400}", "[robot] wheel_diameter_mm", "up to 5000"),
    "thousands of digits": ("= 64.0", f"= 0x1{'0' * 5000}", "[robot] wheel_diameter_mm", "up to 5000"),
    "blank text": ('"cork tile"', '" "', "[floor] surface", "not blank"),
    "two lines": ('"cork tile"', '"cork\\ntile"', "[floor] surface", "on one line"),
    "dictionary with prefix": (
        "APRILTAG_36h11",
        "DICT_APRILTAG_36h11",
        "[markers] dictionary",
        "did you mean APRILTAG_36h11?",
    ),
    "no such dictionary": ("APRILTAG_36h11", "9X9_50", "[markers] dictionary", "4X4_50"),
    "the same id twice": ("aft = 1", "aft = 0", "[markers] aft", "two different ids"),
    "id beyond the dictionary": ("fore = 0", "fore = 587", "[markers] fore", "from 0 to 586"),
    "negative id": ("fore = 0", "fore = -1", "[markers] fore", "from 0 to 586"),
    "id not whole": ("fore = 0", "fore = 0.5", "[markers] fore", "found a number, 0.5"),
    "robot id among the cards": ("fore = 0", "fore = 12", "[markers] cards", "include 12, the fore marker's"),
    "cards the wrong way round": ("[10, 29]", "[29, 10]", "[markers] cards", "[first id, last id]"),
    "three card ids": ("[10, 29]", "[10, 11, 12]", "[markers] cards", "[first id, last id]"),
    "a card id that is text": ("[10, 29]", '["a", 29]', "[markers] cards", "found a text"),
    "cards not a list": ("[10, 29]", "10", "[markers] cards", "found a whole number, 10"),
    "no commands": ("[190, 190, -190, -190]", "[]", "[commands] wheel_deg", "an empty list"),
    "a command of zero": ("[190, 190, -190, -190]", "[190, 0]", "[commands] wheel_deg, entry 2", "found 0"),
    "a command that is text": (
        "[190, 190, -190, -190]",
        '[190, "90"]',
        "[commands] wheel_deg, entry 2",
        "found a text",
    ),
    "a command that is nan": (
        "[190, 190, -190, -190]",
        "[nan]",
        "[commands] wheel_deg, entry 1",
        "found nan",
    ),
    "an absurd command": ("[190, 190, -190, -190]", "[190000]", "[commands] wheel_deg, entry 1", "36000"),
    "commands not a list": (
        "[190, 190, -190, -190]",
        "190",
        "[commands] wheel_deg",
        "found a whole number, 190",
    ),
    "list and file": ("[190, 190, -190, -190]", '[190]\nfile = "c.csv"', "[commands] file", "one of the two"),
    "neither list nor file": ("wheel_deg = [190, 190, -190, -190]", "", "[commands] wheel_deg", "missing"),
    "no such commands file": (
        "wheel_deg = [190, 190, -190, -190]",
        'file = "c.csv"',
        "c.csv",
        "no such file",
    ),
    "robot is not a table": ("[robot]", "robot = 3\n[robott]", "[robot]", "found a whole number, 3"),
    "not TOML": ("[floor]", "[floor", "not TOML", "line 14"),
    "key twice": ("fore = 0", "fore = 0\nfore = 2", "not TOML", "overwrite"),
}


@pytest.mark.parametrize("fault", FAULTS)
def test_each_fault_is_named_with_file_and_key(tmp_path: Path, fault: str):
    old, new, *named = FAULTS[fault]
    assert old in TRIAL
    path = written(tmp_path, TRIAL.replace(old, new, 1))
    with pytest.raises(TrialError) as raised:
        read_trial(path)
    message = str(raised.value)
    assert str(tmp_path) in message
    assert "\n" not in message
    for part in named:
        assert part in message


def test_missing_file_folder_and_binary(tmp_path: Path):
    for path, part in [(tmp_path / "no.toml", "no such file"), (tmp_path, "is a directory")]:
        with pytest.raises(TrialError, match=part):
            read_trial(path)
    (tmp_path / "b.toml").write_bytes(b"\xff\xfe\x00\x01")
    with pytest.raises(TrialError, match="not UTF-8"):
        read_trial(tmp_path / "b.toml")
    (tmp_path / "deep.toml").write_text("a = " + "[" * 5000)
    with pytest.raises(TrialError):
        read_trial(tmp_path / "deep.toml")


def test_dictionaries_are_those_of_opencv():
    """Source: OpenCV's own list as the reference; APRILTAG_36h11 has 587 codes (Olson 2011)."""
    names = {name.removeprefix("DICT_") for name in dir(cv2.aruco) if name.startswith("DICT_")}
    assert set(dictionary_sizes()) == names
    assert dictionary_sizes()["APRILTAG_36h11"] == 587
    assert dictionary_sizes()["4X4_50"] == 50


# commands.csv


def trial_with_commands(tmp_path: Path, content: bytes) -> Path:
    (tmp_path / "commands.csv").write_bytes(content)
    text = TRIAL.replace("wheel_deg = [190, 190, -190, -190]", 'file = "commands.csv"')
    return written(tmp_path, text)


DIALECTS = {
    "plain": b'wheel_deg,speed,note\n190,slow,a\n-190.5,fast,"b, c"\n',
    "windows": b'wheel_deg,speed,note\r\n190,slow,a\r\n-190.5,fast,"b, c"\r\n',
    "byte order mark": b'\xef\xbb\xbfwheel_deg,speed,note\n190,slow,a\n-190.5,fast,"b, c"',
    "semicolons": b"wheel_deg;speed;note\n190;slow;a\n-190,5;fast;b, c\n",
    "tabs": b"wheel_deg\tspeed\tnote\n190\tslow\ta\n-190,5\tfast\tb, c\n",
    "blank lines and spaces": b'\n wheel_deg , speed,note\n\n190 ,slow, a\n-190.5,fast,"b, c"\n\n\n',
}


@pytest.mark.parametrize("dialect", DIALECTS)
def test_commands_file_in_every_dialect(tmp_path: Path, dialect: str):
    commands = read_trial(trial_with_commands(tmp_path, DIALECTS[dialect])).commands
    assert commands.wheel_deg == (190.0, -190.5)
    assert commands.factors == (("speed", ("slow", "fast")), ("note", ("a", "b, c")))
    assert commands.factors_of(1) == {"speed": "fast", "note": "b, c"}


def test_commands_file_is_beside_the_trial_file(tmp_path: Path, monkeypatch: pytest.MonkeyPatch):
    path = trial_with_commands(tmp_path, b"wheel_deg\n5\n")
    elsewhere = tmp_path / "elsewhere"
    elsewhere.mkdir()
    monkeypatch.chdir(elsewhere)
    assert read_trial(path).commands.wheel_deg == (5.0,)


COMMAND_FAULTS = {
    b"": "the file is empty",
    b"speed\n1\n": "line 1: no column wheel_deg",
    b"wheel_deg\n": "no commands below the header",
    b"wheel_deg,speed\n190,a\nabc,b\n": 'line 3: wheel_deg is "abc"',
    b"wheel_deg\n190\n\n\n0\n": 'line 5: wheel_deg is "0"',
    b"wheel_deg\nnan\n": 'line 2: wheel_deg is "nan"',
    b"wheel_deg\ninf\n": 'line 2: wheel_deg is "inf"',
    b"wheel_deg\n1_000\n": 'line 2: wheel_deg is "1_000"',
    b"wheel_deg,speed\n190\n": "line 2: 1 fields; expected 2",
    b"wheel_deg,speed\n,slow\n": 'line 2: wheel_deg is ""',
    b"wheel_deg,190,5\n1,2,3\n1,2\n": "line 3: 2 fields; expected 3",
    b"wheel_deg,speed,speed\n1,2,3\n": 'two columns are called "speed"',
    b"wheel_deg,flags\n1,2\n": 'a column is called "flags"',
    b"wheel_deg,\n1,2\n": "column 2 has no usable name",
    b"\xff\xfew\x00": "not UTF-8",
    b'wheel_deg\n"190\n': "not a CSV line",
}


@pytest.mark.parametrize("content", COMMAND_FAULTS)
def test_each_fault_of_a_commands_file_is_named(tmp_path: Path, content: bytes):
    with pytest.raises(TrialError) as raised:
        read_trial(trial_with_commands(tmp_path, content))
    assert "commands.csv" in str(raised.value)
    assert COMMAND_FAULTS[content] in str(raised.value)


# random damage


def tried(path: Path) -> Trial | None:
    """Return the trial, or None where a TrialError of one line says why not; anything else is our fault."""
    try:
        return read_trial(path)
    except TrialError as error:
        message = str(error)
    assert len(message.splitlines()) == 1
    return None


JUNK = st.one_of(
    st.text(max_size=20),
    st.sampled_from(["= ", "[", "]", '"', "nan", "-inf", "1e999", "\x00", "''", "{}", "[[robot]]", "#", "\u2028"]),
)


@settings(max_examples=300, deadline=None, suppress_health_check=[HealthCheck.function_scoped_fixture])
@given(start=st.integers(0, len(TRIAL)), length=st.integers(0, 40), junk=JUNK)
def test_random_damage_gives_a_trial_or_a_trial_error(tmp_path: Path, start: int, length: int, junk: str):
    damaged = (TRIAL[:start] + junk + TRIAL[start + length :]).encode("utf-8", "replace")
    path = tmp_path / "t.toml"
    path.write_bytes(damaged)
    trial = tried(path)
    if trial is not None:
        assert trial_from_dict(trial.as_dict()) == trial


@settings(max_examples=200, deadline=None, suppress_health_check=[HealthCheck.function_scoped_fixture])
@given(content=st.one_of(st.binary(max_size=60), st.text(max_size=60).map(lambda t: ("wheel_deg\n" + t).encode())))
def test_random_commands_files_give_commands_or_a_trial_error(tmp_path: Path, content: bytes):
    path = trial_with_commands(tmp_path, content)
    trial = tried(path)
    if trial is not None:
        assert trial.commands.wheel_deg
        assert all(0 < abs(value) <= 36_000 for value in trial.commands.wheel_deg)


VALUES = st.one_of(
    st.none(),
    st.booleans(),
    st.integers(),
    st.floats(),
    st.text(max_size=5),
    st.lists(st.integers(-5, 40), max_size=3),
    st.dictionaries(st.sampled_from(["name", "fore", "x"]), st.integers(), max_size=2),
)


def as_toml(value: object) -> str:
    if isinstance(value, bool):
        return str(value).lower()
    if isinstance(value, str):
        return "'''" + "".join(c for c in value if c.isprintable() and c != "'") + "'''"
    if isinstance(value, dict):
        return "{" + ", ".join(f"{key} = {item}" for key, item in value.items()) + "}"
    return str(value)


@settings(max_examples=300, deadline=None, suppress_health_check=[HealthCheck.function_scoped_fixture])
@given(
    line=st.integers(0, len(TRIAL.splitlines()) - 1),
    value=VALUES.filter(lambda value: value is not None),
)
def test_any_value_for_any_key_gives_a_trial_or_a_trial_error(tmp_path: Path, line: int, value: object):
    lines = TRIAL.splitlines()
    if "=" in lines[line]:
        lines[line] = lines[line].split("=")[0] + "= " + as_toml(value)
    path = tmp_path / "t.toml"
    path.write_bytes("\n".join(lines).encode("utf-8", "replace"))
    trial = tried(path)
    if trial is not None:
        trial.marker_setup()
