"""Commands in the table: numbers, flags, events, warnings."""

from __future__ import annotations

import math

import pytest

from floorswing.commands_file import Commands
from floorswing.errors import CommandsMismatch
from floorswing.matching import DOUBTFUL_MATCH, EXTRA, Remedies, match_clip, match_clips
from vision.records import Event

from .conftest import clip_result

COMMANDS = Commands(
    wheel_deg=(190, 380, -190, -380, 190, -760),
    factors=(("speed", ("a", "b", "c", "d", "e", "f")),),
)
CHANGES_DEG = [90.2, 181.0, -89.8, -180.1, 90.4, -361.0]


def test_every_turn_gets_its_command_and_factors():
    matched = match_clip(clip_result(CHANGES_DEG), COMMANDS)
    assert [turn.turn for turn in matched.turns] == [1, 2, 3, 4, 5, 6]
    assert [turn.commanded_wheel_deg for turn in matched.turns] == list(COMMANDS.wheel_deg)
    assert [turn.factors["speed"] for turn in matched.turns] == list("abcdef")
    assert all(turn.flags == () for turn in matched.turns)
    assert matched.warnings == ()


def test_a_missing_turn_becomes_an_event_between_its_neighbours():
    changes = [*CHANGES_DEG[:2], *CHANGES_DEG[3:]]
    result = clip_result(changes, events=(Event(start_s=0.0, end_s=1.0, kind="driven", detail=""),))
    matched = match_clip(result, COMMANDS)
    assert [turn.commanded_wheel_deg for turn in matched.turns] == [190, 380, -380, 190, -760]
    assert [event.kind for event in matched.events] == ["driven", "missing turn"]
    gap = matched.events[1]
    assert (gap.start_s, gap.end_s) == (result.turns[1].end_s, result.turns[2].start_s)
    assert gap.detail == "no turn seen for command 3 (-190 wheel degrees)"
    assert matched.warnings == ("no turn seen for command 3",)


def test_missing_first_and_last_turns_lie_at_the_ends_of_the_clip():
    result = clip_result(CHANGES_DEG[1:-1])
    first, last = match_clip(result, COMMANDS).events
    assert first.start_s == 0.0
    assert first.end_s == result.turns[0].start_s
    assert last.start_s == result.turns[-1].end_s
    assert last.end_s == result.track.time_s[-1]


def test_an_extra_turn_is_flagged_and_kept():
    changes = [*CHANGES_DEG[:3], 41.0, *CHANGES_DEG[3:]]
    matched = match_clip(clip_result(changes), COMMANDS)
    extra = matched.turns[3]
    assert EXTRA in extra.flags
    assert math.isnan(extra.commanded_wheel_deg)
    assert extra.factors == {"speed": ""}
    assert len(matched.turns) == 7
    assert "no command fits turn 4; counted as extra, not used in a fit" in matched.warnings


def test_a_turn_that_could_be_either_of_two_is_flagged():
    """Two equal commands and one turn: which of them it answers is a matter of chance."""
    commands = Commands(wheel_deg=(190, -380, 190, 190, -380, 190))
    matched = match_clip(clip_result([90.0, -180.0, 90.0, -180.0, 90.0]), commands)
    assert DOUBTFUL_MATCH in matched.turns[2].flags
    assert DOUBTFUL_MATCH not in matched.turns[0].flags
    assert any("doubtful which command turn 3" in warning for warning in matched.warnings)


def test_commands_that_do_not_fit_are_refused_with_the_counts():
    with pytest.raises(CommandsMismatch, match="6 turns seen, 2 commands in the trial, 2 fit") as raised:
        match_clip(clip_result(CHANGES_DEG), Commands(wheel_deg=(190, -760)))
    assert (raised.value.n_turns, raised.value.n_commands, raised.value.n_matched) == (6, 2, 2)


def test_commands_with_every_sign_wrong_are_told_so():
    wrong = Commands(wheel_deg=tuple(-w for w in COMMANDS.wheel_deg))
    with pytest.raises(CommandsMismatch, match="counter-clockwise"):
        match_clip(clip_result(CHANGES_DEG), wrong)


def test_a_clip_without_turns_has_only_missing_ones():
    matched = match_clip(clip_result([]), COMMANDS)
    assert matched.turns == ()
    assert [event.kind for event in matched.events] == ["missing turn"] * 6


def test_commands_run_on_across_clips():
    results = [clip_result(CHANGES_DEG[:2]), clip_result(CHANGES_DEG[2:4]), clip_result(CHANGES_DEG[5:])]
    first, second, third = match_clips(results, COMMANDS)
    assert [turn.commanded_wheel_deg for turn in first.turns] == [190, 380]
    assert [turn.commanded_wheel_deg for turn in second.turns] == [-190, -380]
    assert [turn.commanded_wheel_deg for turn in third.turns] == [-760]
    assert [turn.turn for turn in third.turns] == [1]
    assert second.events[-1].detail.startswith("no turn seen for command 5")
    assert (first.events, third.events) == ((), ())


def test_a_long_list_of_missing_turns_stays_one_short_line():
    matched = match_clip(clip_result(CHANGES_DEG), Commands(wheel_deg=COMMANDS.wheel_deg + (190,) * 30))
    assert "and 22 more" in matched.warnings[0]


ALIKE = Commands(wheel_deg=(190, 190, 190, 190, -190))
"""A list in which the pictures alone cannot tell which turn was lost."""


def test_the_command_that_a_late_clip_begins_with_takes_the_doubt_away():
    result = clip_result([90.0, 90.4, 89.9, -90.0])
    assert DOUBTFUL_MATCH in match_clip(result, ALIKE).turns[0].flags
    matched = match_clip(result, ALIKE, Remedies(from_command=2))
    assert [turn.flags for turn in matched.turns] == [()] * 4
    assert matched.events == ()
    assert matched.warnings == ()


def test_undriven_commands_are_passed_over_and_factors_follow():
    changes = [*CHANGES_DEG[:1], *CHANGES_DEG[2:4], *CHANGES_DEG[5:]]
    matched = match_clip(clip_result(changes), COMMANDS, Remedies(undriven=(2, 5)))
    assert [turn.commanded_wheel_deg for turn in matched.turns] == [190, -190, -380, -760]
    assert [turn.factors["speed"] for turn in matched.turns] == list("acdf")
    assert matched.events == ()


def test_stray_turns_are_flagged_and_answer_nothing():
    changes = [*CHANGES_DEG[:2], 90.0, *CHANGES_DEG[2:]]
    matched = match_clip(clip_result(changes), COMMANDS, Remedies(stray_turns=(3,)))
    assert [turn.commanded_wheel_deg for turn in matched.turns if EXTRA not in turn.flags] == list(COMMANDS.wheel_deg)
    assert matched.turns[2].flags == (EXTRA,)
    assert "no command fits turn 3" in matched.warnings[0]


@pytest.mark.parametrize(
    ("remedies", "says"),
    [
        (Remedies(from_command=7), "command 7 was named, but the trial has 6 commands; accepted: 1 to 6"),
        (Remedies(undriven=(3, 9)), "command 9 was named"),
        (Remedies(stray_turns=(8,)), "turn 8 was named, but 6 turns were seen; accepted: 1 to 6"),
    ],
)
def test_what_is_not_there_cannot_be_named(remedies, says):
    with pytest.raises(CommandsMismatch, match=says):
        match_clip(clip_result(CHANGES_DEG), COMMANDS, remedies)
