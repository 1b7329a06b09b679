"""What must not depend on how the picture happens to lie: signs, units, whole revolutions."""

import numpy as np
from hypothesis import given, settings
from hypothesis import strategies as st
from numpy.testing import assert_allclose

from tests.vision.synthetic import corner_track, profile, seen_from, truth
from vision.bundle import calibrate
from vision.markers import UNIT_CORNERS
from vision.pair import body_from_corners
from vision.plane import N_GLOBAL, PRINT_MODES, body_points, plane_map, shape_from_homography, to_floor, units_for
from vision.poses import solve_poses
from vision.rigid import project, rigid, rigid_between
from vision.turns import split_turns

NO_COV = np.zeros((N_GLOBAL, N_GLOBAL))
angles = st.floats(-np.pi, np.pi)
lengths = st.floats(-3.0, 3.0)


def wrapped(angle_rad):
    return (angle_rad + np.pi) % (2.0 * np.pi) - np.pi


@given(turn=angles, more=angles, x=lengths, y=lengths)
def test_turning_the_plane_turns_the_pose_by_as_much(turn, more, x, y):
    square = UNIT_CORNERS
    once = project(rigid(turn, x, y), square)
    twice = project(rigid(more, 0.0, 0.0), once)
    found, _, _ = rigid_between(square, twice)
    assert_allclose(wrapped(found - turn - more), 0.0, atol=1e-9)


@given(turn=angles, x=lengths, y=lengths)
def test_a_mirror_turns_the_other_way(turn, x, y):
    mirror = np.array([1.0, -1.0])
    seen = project(rigid(turn, x, y), UNIT_CORNERS)
    found, back_x, back_y = rigid_between(UNIT_CORNERS * mirror, seen * mirror)
    assert_allclose([wrapped(found + turn), back_x, back_y], [0.0, x, -y], atol=1e-9)


@given(turn=angles, x=lengths, y=lengths, length=st.floats(1.0, 1000.0))
def test_headings_do_not_know_the_unit_of_length(turn, x, y, length):
    units = units_for((1920, 1080), side_mm=40.0, length_mm=length)
    heading, x_mm, y_mm = to_floor(np.array([[turn, x, y]]), units)
    assert_allclose([heading[0], x_mm[0], y_mm[0]], [-turn, x * length, -y * length])


@given(
    values=st.lists(st.floats(-0.3, 0.3), min_size=4, max_size=4),
    perspective=st.lists(st.floats(-0.15, 0.15), min_size=2, max_size=2),
)
def test_five_numbers_and_a_place_hold_any_plane_map(values, perspective):
    a, b, c, d = values
    homography = np.array([[1.0 + a, b, 0.2 * a], [c, 1.0 + d, 0.2 * b], [*perspective, 1.0]])
    shape, place = shape_from_homography(homography)
    again = plane_map(shape) @ np.linalg.inv(place)
    assert_allclose(again / again[2, 2], homography, atol=1e-9)
    assert_allclose(place[:2, :2] @ place[:2, :2].T, np.eye(2), atol=1e-12)


@given(weights=st.lists(st.floats(-0.05, 0.05), min_size=8, max_size=8))
def test_prints_off_square_are_no_turn_and_no_size(weights):
    p, units = truth()
    p = p.copy()
    p[13:] = weights
    shaped, plain = body_points(p, units), body_points(truth()[0], units)
    for m in range(2):
        turn, x, y = rigid_between(plain[m], shaped[m])
        middle = plain[m].mean(axis=0)
        assert_allclose(shaped[m].mean(axis=0), middle, atol=1e-12)
        assert abs(turn) < 1e-9
        assert np.hypot(x, y) < 1e-9
    assert PRINT_MODES.shape == (4, 4, 2)


@settings(max_examples=15, deadline=None)
@given(turn_deg=st.floats(-180.0, 180.0), scale=st.floats(0.3, 3.0))
def test_a_pair_is_the_same_however_the_camera_is_turned(turn_deg, scale):
    plane = np.array([[1.05, 0.06, 700.0], [-0.08, 0.98, 420.0], [6e-5, -1.1e-4, 1.0]])
    square = UNIT_CORNERS * 40.0
    seen = np.stack([project(plane @ rigid(*pose), square) for pose in ((0.3, 90.0, -12.0), (-1.1, -40.0, 25.0))])
    about = rigid(np.deg2rad(turn_deg), 900.0, 500.0) @ np.diag([scale, scale, 1.0])
    one, two = body_from_corners(seen, 40.0), body_from_corners(project(about, seen), 40.0)
    assert_allclose(two.points_mm, one.points_mm, atol=1e-4)  # mm


@settings(max_examples=8, deadline=None)
@given(step=st.floats(4.0, 110.0), n=st.integers(30, 60), seed=st.integers(0, 50))
def test_headings_follow_through_whole_revolutions(step, n, seed):
    """Any rotation of less than half a turn from frame to frame is followed; none is lost or wrapped."""
    headings = step * np.arange(n)
    p, units = truth()
    track = corner_track(headings, p=p, units=units, noise_px=0.02, seed=seed)
    found = np.degrees(np.unwrap(solve_poses(track, calibrate(track)).heading_rad))
    assert_allclose(found - found[0], headings, atol=0.15)


@settings(max_examples=15, deadline=None)
@given(turns=st.lists(st.integers(-400, 400).filter(lambda v: abs(v) >= 5), min_size=1, max_size=4))
def test_a_clip_played_backwards_turns_back(turns):
    time_s, heading = profile(turns)
    forth = split_turns(seen_from(time_s, heading), NO_COV)
    back = split_turns(seen_from(time_s, heading[::-1]), NO_COV)
    changes = np.array([turn.heading_change_deg for turn in forth.turns])
    assert_allclose(changes, turns, atol=0.02)
    assert_allclose([-turn.heading_change_deg for turn in back.turns][::-1], changes, atol=0.02)


@settings(max_examples=15, deadline=None)
@given(scale=st.floats(0.2, 5.0), turns=st.lists(st.integers(20, 300), min_size=1, max_size=3))
def test_slower_frames_and_slower_turns_are_the_same_turns(scale, turns):
    """Stretching time changes rates and no heading: nothing counts frames or assumes 30 of them a second."""
    time_s, heading = profile(turns, rest_s=1.2)
    result = split_turns(seen_from(time_s, heading), NO_COV)
    other = split_turns(seen_from(time_s * max(scale, 0.5), heading), NO_COV)
    assert len(result.turns) == len(other.turns) == len(turns)
    assert_allclose([turn.heading_change_deg for turn in other.turns], turns, atol=0.02)
