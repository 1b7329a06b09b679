import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from numpy.testing import assert_allclose

from tests.vision.synthetic import profile, seen_from
from vision.plane import N_GLOBAL
from vision.turns import split_turns

NO_COV = np.zeros((N_GLOBAL, N_GLOBAL))


def split(time_s, heading_deg, **options):
    return split_turns(seen_from(time_s, heading_deg, **options), NO_COV)


def changes(result):
    return [turn.heading_change_deg for turn in result.turns]


def test_turns_and_rests():
    turns = [90.0, 90.0, -45.0, -180.0, 10.0]
    result = split(*profile(turns))
    assert_allclose(changes(result), turns, atol=0.01)
    assert not result.events
    assert all(turn.flags == () for turn in result.turns)
    assert all(turn.wander_mm < 0.1 for turn in result.turns)


@settings(max_examples=25, deadline=None)
@given(
    turns=st.lists(st.floats(5.0, 300.0).map(round) | st.floats(-300.0, -5.0).map(round), min_size=1, max_size=6),
    start=st.floats(-720.0, 720.0),
    seed=st.integers(0, 99),
)
def test_where_the_heading_starts_does_not_matter(turns, start, seed):
    result = split(*profile(turns, start_deg=start), seed=seed)
    assert_allclose(changes(result), turns, atol=0.02)


@pytest.mark.parametrize("rate_deg_s", [30.0, 150.0, 400.0])
def test_several_revolutions_are_counted(rate_deg_s):
    result = split(*profile([800.0, -1100.0], rate_deg_s=rate_deg_s))
    assert_allclose(changes(result), [800.0, -1100.0], atol=0.02)


def test_a_clip_that_starts_or_ends_in_a_turn():
    time_s, heading = profile([90.0, 90.0, 90.0])
    inside = (time_s > 1.3) & (time_s < 5.2)
    result = split(time_s[inside] - time_s[inside][0], heading[inside])
    assert "clipped" in result.turns[0].flags
    assert "clipped" in result.turns[-1].flags
    assert np.isnan(result.turns[0].heading_change_deg)
    assert_allclose(result.turns[1].heading_change_deg, 90.0, atol=0.01)


def test_a_short_gap_is_bridged_and_flagged():
    time_s, heading = profile([90.0, 90.0])
    keep = ~((time_s > 1.2) & (time_s < 1.5))
    result = split(time_s, heading, keep=keep)
    assert_allclose(changes(result), [90.0, 90.0], atol=0.01)
    assert result.turns[0].flags == ("gap",)
    assert [event.kind for event in result.events] == ["hidden"]


def test_a_gap_that_could_hide_a_revolution_is_never_bridged():
    time_s, heading = profile([90.0, 90.0, 90.0])
    start = 0.8 + 0.3
    keep = ~((time_s > start) & (time_s < start + 3.0))
    result = split(time_s, heading, keep=keep)
    assert_allclose(changes(result), [90.0], atol=0.01)
    assert "handled" in [event.kind for event in result.events]
    assert result.turns[0].flags == ("handled_before",)


def test_a_change_while_out_of_sight_at_rest_is_not_averaged_into_the_rest():
    time_s, heading = profile([90.0, -90.0], rest_s=3.0)
    heading = heading + np.where((time_s > 5.5) & (time_s < 7.0), 0.0, 0.0) + 17.0 * (time_s > 5.5)
    result = split(time_s, heading, keep=~((time_s > 4.8) & (time_s < 6.5)))
    assert_allclose(changes(result), [90.0, -90.0], atol=0.01)
    assert "handled" in [event.kind for event in result.events]


def test_two_pushes_are_one_turn():
    time_s, heading = profile([50.0, 40.0], rest_s=0.13)
    rest = np.arange(24) / 30.0
    time_s = np.concatenate([rest, 0.8 + time_s, 0.8 + time_s[-1] + 1 / 30.0 + rest])
    heading = np.concatenate([np.zeros(24), heading, np.full(24, 90.0)])
    result = split(time_s, heading)
    assert_allclose(changes(result), [90.0], atol=0.01)
    assert result.turns[0].flags == ("two_pushes",)


def test_driving_is_an_event():
    time_s, heading = profile([90.0, 90.0], rest_s=3.0)
    x_mm = 120.0 / (1.0 + np.exp(-(time_s - 5.6) * 8.0))  # in the middle of the second rest
    result = split(time_s, heading, x_mm=x_mm)
    assert_allclose(changes(result), [90.0, 90.0], atol=0.01)
    assert [event.kind for event in result.events] == ["driven"]
    assert result.turns[1].flags == ("handled_before",)


def test_lifting_is_an_event():
    time_s, heading = profile([90.0, 90.0, 90.0])
    lifted = 0.06 * np.exp(-(((time_s - 3.1) / 0.3) ** 2))
    result = split(time_s, heading, scale=1.0 + lifted)
    assert_allclose(changes(result), [90.0, 90.0], atol=0.01)
    assert [event.kind for event in result.events] == ["handled"]


def test_uncertainty_holds_the_truth():
    """Independent noise in every frame: 60 turns within 2.5 u, and the ratio of RMS error to mean u near 1 (4 sd)."""
    errors, us = [], []
    for seed in range(12):
        result = split(*profile([90.0, -90.0, 90.0, 45.0, -45.0]), seed=seed, noise_deg=0.02)
        errors += [t.heading_change_deg - w for t, w in zip(result.turns, [90, -90, 90, 45, -45], strict=True)]
        us += [t.u_heading_change_deg for t in result.turns]
    ratio = np.sqrt(np.mean(np.square(errors))) / np.mean(us)
    assert abs(ratio - 1.0) < 4.0 * np.sqrt(1.0 / 120.0)


def test_overshoot_and_settling():
    time_s, heading = profile([90.0])
    stop_s = 1.93
    ringing = 3.0 * np.exp(-(time_s - stop_s) / 0.08) * (time_s > stop_s)
    result = split(time_s, heading + ringing)
    assert result.turns[0].overshoot_deg > 1.0
    assert_allclose(changes(result), [90.0], atol=0.02)


def test_a_body_that_rocks_in_its_turn_is_not_lifted():
    time_s, heading = profile([90.0, 90.0])
    moving = np.abs(np.gradient(heading)) > 1e-6
    result = split(time_s, heading, scale=1.0 + 0.012 * np.sin(20.0 * time_s) * moving)
    assert_allclose(changes(result), [90.0, 90.0], atol=0.01)
    assert [turn.flags for turn in result.turns] == [("rocked",)] * 2


def test_a_lift_is_no_turn_however_it_turns():
    time_s, heading = profile([90.0, 90.0])
    second = (np.abs(np.gradient(heading)) > 1e-6) & (heading > 91.0)
    result = split(time_s, heading, scale=1.0 + 0.06 * second)
    assert_allclose(changes(result), [90.0], atol=0.01)
    assert [event.kind for event in result.events] == ["handled"]


def test_a_turn_that_strays_out_of_sight_was_helped():
    time_s, heading = profile([90.0, 90.0])
    inside = (heading > 120.0) & (heading < 150.0)
    away = np.where(heading > 135.0, 90.0, 0.0)
    result = split(time_s, heading, keep=~inside, x_mm=away)
    assert_allclose(changes(result), [90.0], atol=0.01)
    assert "handled" in [event.kind for event in result.events]


def test_a_turn_and_back_without_a_rest_says_so():
    time_s, heading = profile([60.0, -60.0], rest_s=0.8)
    pause = (heading > 59.9) & (np.abs(np.gradient(heading)) < 1e-6)
    keep = ~pause
    time_s = np.arange(keep.sum()) / 30.0
    result = split(time_s, heading[keep])
    assert result.turns == ()
    assert [event.kind for event in result.events] == ["nudge"]
    assert "went 60.0 deg away and came back" in result.events[0].detail


def test_what_moves_while_the_view_moves_is_not_the_robot():
    time_s, heading = profile([90.0, 1.5, 90.0])
    small = time_s[(heading > 90.001) & (heading < 91.499)]
    result = split_turns(seen_from(time_s, heading), NO_COV, knocks=[(float(small[0]), float(small[-1]))])
    assert_allclose(changes(result), [90.0, 90.0], atol=0.01)
    assert result.events == ()
