"""Measured turns against rendered ones."""

from __future__ import annotations

import math
from dataclasses import replace
from pathlib import Path

import pytest
from numpy.testing import assert_allclose

from floorswing.commands_file import Commands
from floorswing.errors import FileError
from floorswing.matching import match_clip
from floorswing.truth import TrueTurn, check_against, read_truth

from .conftest import clip_result

CHANGES_DEG = [90.0, -180.0, 45.0]
WHEEL_DEG = (190.0, -380.0, 95.0)


def measured():
    return match_clip(clip_result(CHANGES_DEG), Commands(wheel_deg=WHEEL_DEG)).turns


def true_turns(errors_deg=(0.0, 0.0, 0.0)) -> list[TrueTurn]:
    return [
        TrueTurn(
            commanded_wheel_deg=turn.commanded_wheel_deg,
            heading_change_deg=turn.heading_change_deg - error,
            start_s=turn.start_s + 0.05,
            end_s=turn.end_s - 0.02,
        )
        for turn, error in zip(measured(), errors_deg, strict=True)
    ]


def test_errors_and_their_intervals():
    check = check_against(measured(), true_turns((0.03, -0.0399, 0.05)))  # u is 0.02 for each
    assert (check.n_true, check.n_found, check.n_invented, check.n_right_command) == (3, 3, 0, 3)
    assert_allclose(check.rms_deg, math.sqrt((9 + 3.99**2 + 25) / 3) / 100, rtol=1e-9)
    assert_allclose(check.worst_deg, 0.05, rtol=1e-9)
    assert check.n_within == 2


def test_missed_invented_and_wrongly_matched_turns_are_counted():
    turns = measured()
    truth = [*true_turns()[:2], TrueTurn(commanded_wheel_deg=9, heading_change_deg=4, start_s=50, end_s=51)]
    check = check_against([replace(turns[0], commanded_wheel_deg=5.0), *turns[1:]], truth)
    assert (check.n_true, check.n_found, check.n_invented, check.n_right_command) == (3, 2, 1, 1)


def test_a_turn_without_a_number_is_within_nothing():
    turns = [replace(turn, heading_change_deg=math.nan) for turn in measured()]
    check = check_against(turns, true_turns())
    assert (check.n_found, check.n_within) == (3, 0)
    assert math.isnan(check.rms_deg)
    assert math.isnan(check.worst_deg)


def test_the_file_and_its_faults(tmp_path: Path):
    path = tmp_path / "a.truth.csv"
    path.write_text("turn,commanded_wheel_deg,heading_change_deg,start_s,end_s\n1,190,90.5,1.0,2.5\n")
    assert read_truth(path) == (TrueTurn(commanded_wheel_deg=190.0, heading_change_deg=90.5, start_s=1.0, end_s=2.5),)
    for text in (
        "turn,start_s\n1,2\n",
        "turn,commanded_wheel_deg,heading_change_deg,start_s,end_s\n1,a,2,3,4\n",
    ):
        path.write_text(text)
        with pytest.raises(FileError, match="cannot be read as the truth"):
            read_truth(path)
    with pytest.raises(FileError):
        read_truth(tmp_path / "no.csv")
