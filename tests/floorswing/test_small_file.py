"""Trial and commands files that are no files: devices, pipes, folders, giants."""

import os
from pathlib import Path

import pytest

from floorswing.errors import TrialError
from floorswing.small_file import MOST_BYTES, read_small_text
from floorswing.trial import read_trial


def test_text_with_a_byte_order_mark_and_any_line_ends(tmp_path: Path):
    path = tmp_path / "a.toml"
    path.write_bytes(b"\xef\xbb\xbfa = 1\r\nb = 2\rc = 3\n")
    assert read_small_text(path) == "a = 1\nb = 2\nc = 3\n"


@pytest.mark.parametrize("kind", ["pipe", "device", "giant", "folder", "nothing"])
def test_what_is_no_small_file_is_refused_at_once(tmp_path: Path, trial_file: Path, kind: str):
    path = tmp_path / "commands.csv"
    if kind == "pipe":
        os.mkfifo(path)
    elif kind == "device":
        path = Path("/dev/zero")
    elif kind == "giant":
        with path.open("wb") as file:
            file.truncate(MOST_BYTES + 1)  # sparse: takes no room
    elif kind == "folder":
        path.mkdir()
    with pytest.raises(OSError):  # noqa: PT011 - the reason is the system's
        read_small_text(path)
    with pytest.raises(TrialError, match="cannot be read") as caught:
        read_trial(path)
    assert "\n" not in str(caught.value)
    text = trial_file.read_text().replace("wheel_deg = [190, 190, -190, -190]", f'file = "{path}"')
    trial_file.write_text(text)
    with pytest.raises(TrialError) as caught:
        read_trial(trial_file)
    assert "\n" not in str(caught.value)
