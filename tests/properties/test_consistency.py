"""What may not change when the same trial is described in another way."""

import dataclasses

import numpy as np
from hypothesis import given, settings
from hypothesis import strategies as st
from numpy.testing import assert_allclose

from calib.consistency import judge
from calib.fit import fit_turns
from calib.table import TurnTable
from calib.turns import Turns
from tests.calib.driven import driven

TABLE = driven(12, blocks=3, runs=2, grain=0.02, axis_deg=30.0, slope_per_m=0.03, drift_deg=0.02)
EXAMPLES = settings(max_examples=8, deadline=None)


def judged(table):
    return judge(table, fit_turns(table.turns))


FOUND = judged(TABLE)


def p_values(found):
    return {check.name: check.p_value for check in found.checks}


def alike(found, rtol=1e-6):
    assert_allclose(list(p_values(found).values()), list(p_values(FOUND).values()), rtol=rtol)


@EXAMPLES
@given(st.floats(-720.0, 720.0))
def test_turning_the_floor_frame_turns_axis_and_slope_with_it(turned_deg):
    c, s = np.cos(np.radians(turned_deg)), np.sin(np.radians(turned_deg))
    found = judged(
        dataclasses.replace(
            TABLE,
            start_heading_deg=TABLE.start_heading_deg + turned_deg,
            x_mm=c * TABLE.x_mm - s * TABLE.y_mm,
            y_mm=s * TABLE.x_mm + c * TABLE.y_mm,
        )
    )
    alike(found)
    for one, other in zip(found.grain.frames, FOUND.grain.frames, strict=True):
        assert_allclose(one.amplitude.value, other.amplitude.value, rtol=1e-6)
        apart = (one.axis_deg.value - other.axis_deg.value - turned_deg + 90.0) % 180.0 - 90.0
        assert_allclose(apart, 0.0, atol=1e-4)
    for one, other in zip(found.warp.frames, FOUND.warp.frames, strict=True):
        assert_allclose(one.slope_per_m.value, other.slope_per_m.value, rtol=1e-6)
        apart = (one.uphill_deg.value - other.uphill_deg.value - turned_deg + 180.0) % 360.0 - 180.0
        assert_allclose(apart, 0.0, atol=1e-4)


@EXAMPLES
@given(st.floats(-2000.0, 2000.0), st.floats(-2000.0, 2000.0))
def test_moving_the_floor_frame_changes_nothing(x_mm, y_mm):
    alike(judged(dataclasses.replace(TABLE, x_mm=TABLE.x_mm + x_mm, y_mm=TABLE.y_mm + y_mm)))


def test_mirroring_the_trial_mirrors_the_axis():
    turns = TABLE.turns
    found = judged(
        dataclasses.replace(
            TABLE,
            turns=Turns(
                wheel_deg=-turns.wheel_deg, heading_deg=-turns.heading_deg, u_deg=turns.u_deg, reversed_=turns.reversed_
            ),
            start_heading_deg=-TABLE.start_heading_deg,
            y_mm=-TABLE.y_mm,
        )
    )
    alike(found)
    for one, other in zip(found.grain.frames, FOUND.grain.frames, strict=True):
        assert_allclose(one.amplitude.value, other.amplitude.value, rtol=1e-6)
        assert_allclose((one.axis_deg.value + other.axis_deg.value + 90.0) % 180.0 - 90.0, 0.0, atol=1e-4)


def test_the_order_of_runs_does_not_matter():
    rows = np.array(TABLE.run)
    order = np.concatenate([np.flatnonzero(rows == "run 1"), np.flatnonzero(rows == "run 0")])
    turns = TABLE.turns
    other = TurnTable(
        turns=Turns(
            **{name: getattr(turns, name)[order] for name in ("wheel_deg", "heading_deg", "u_deg", "reversed_")}
        ),
        run=tuple(TABLE.run[n] for n in order),
        frame=tuple(TABLE.frame[n] for n in order),
        factors={"load": tuple(TABLE.factors["load"][n] for n in order)},
        **{name: getattr(TABLE, name)[order] for name in ("number", "start_heading_deg", "x_mm", "y_mm", "wanted_deg")},
    )
    found = judged(other)
    alike(found)
    assert [cell.wheel_deg for cell in found.cells] == [cell.wheel_deg for cell in FOUND.cells]
    assert_allclose(found.runs.between.value, FOUND.runs.between.value, rtol=1e-6, atol=1e-9)


@EXAMPLES
@given(st.floats(0.01, 100.0))
def test_the_unit_of_the_wheel_angle_does_not_matter(times):
    turns = TABLE.turns
    scaled = Turns(
        wheel_deg=times * turns.wheel_deg, heading_deg=turns.heading_deg, u_deg=turns.u_deg, reversed_=turns.reversed_
    )
    found = judged(dataclasses.replace(TABLE, turns=scaled))
    alike(found)
    assert_allclose(found.repeatability_deg.value, FOUND.repeatability_deg.value, rtol=1e-6)
