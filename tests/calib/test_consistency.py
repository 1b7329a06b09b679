import dataclasses

import numpy as np
import pytest
from numpy.testing import assert_allclose

from calib.consistency import judge
from calib.errors import NotIdentified
from calib.factors import columns_of
from calib.fit import fit_turns
from calib.grain import grain_columns
from calib.table import plain_table
from calib.turns import Turns
from tests.calib.driven import driven


def judged(table):
    return judge(table, fit_turns(table.turns))


def check(found, name):
    return next(one for one in found.checks if one.name == name)


def test_grain_columns_are_the_integral_along_the_turn():
    """Source: the integral of amplitude * cos 2(h - axis) over the turn, by small steps."""
    start, change, axis = 20.0, 130.0, 35.0
    h = np.radians(np.linspace(start, start + change, 200001))
    stepped = np.degrees(np.trapezoid(np.cos(2.0 * (h - np.radians(axis))), h))
    both = grain_columns([start], [change])[0] @ [np.cos(2 * np.radians(axis)), np.sin(2 * np.radians(axis))]
    assert_allclose(both, stepped, rtol=1e-8)
    back = grain_columns([start + change], [-change])[0]
    assert_allclose(back, -grain_columns([start], [change])[0], rtol=1e-12)


def test_grain_is_found_with_its_axis():
    found = judged(driven(1, grain=0.03, axis_deg=40.0, blocks=6))
    (one,) = found.grain.frames
    assert check(found, "grain").p_adjusted < 0.001
    assert one.amplitude.low < 0.03 < one.amplitude.high
    assert one.axis_deg.low < 40.0 < one.axis_deg.high
    assert one.amplitude.low > 0.0


def test_each_effect_is_found_under_its_own_name():
    for effect, name in (
        ({"drift_deg": 0.05}, "drift"),
        ({"slope_per_m": 0.04}, "slope of place"),
        ({"factor": 0.02}, "factor load"),
        ({"between_deg": 1.0, "runs": 4}, "runs"),
    ):
        found = judged(driven(4, blocks=5, **effect))
        first = min((one for one in found.checks if not one.reason), key=lambda one: one.p_value)
        assert first.name == name
        assert first in found.seen()
    found = judged(driven(3, blocks=5, slope_per_m=0.04))
    slope = found.warp.frames[0].slope_per_m
    assert slope.low < 0.04 < slope.high
    drift = judged(driven(3, blocks=5, drift_deg=0.05)).drift.slope_deg
    assert drift.low < 0.05 < drift.high
    (load,) = judged(driven(3, blocks=5, factor=0.02)).factors
    assert load.effects[0][0] in ("full against empty", "empty against full")
    assert abs(abs(load.effects[0][1].value) - 0.02) < 3 * load.effects[0][1].u


def test_cells_hold_mean_trueness_and_repeatability():
    table = driven(2, blocks=4)
    found = judged(table)
    turns = table.turns
    cell = next(one for one in found.cells if one.wheel_deg == -150.0 and one.after_reversal)
    rows = (turns.wheel_deg == -150.0) & (turns.reversed_ == 1.0)
    assert cell.n == rows.sum() == 4
    assert_allclose(cell.mean_deg.value, turns.heading_deg[rows].mean())
    sd = turns.heading_deg[rows].std(ddof=1)
    assert_allclose(cell.repeatability_deg.value, np.sqrt(sd**2 - 0.02**2))
    assert not cell.wanted_is_given
    wanted = dataclasses.replace(table, wanted_deg=np.where(turns.wheel_deg < 0, -70.0, 70.0))
    cell = next(one for one in judged(wanted).cells if one.wheel_deg == -150.0 and one.after_reversal)
    assert cell.wanted_is_given
    assert_allclose(cell.trueness_deg.value, -turns.heading_deg[rows].mean() - 70.0)


def test_means_rest_on_the_scatter_of_all_repeats():
    table = driven(2, wheel_deg=np.tile([190.0, 190.0, -190.0, -190.0], 4))
    found, turns = judged(table), table.turns
    cells = [(w, back) for w in (190.0, -190.0) for back in (0.0, 1.0)]
    repeats = [turns.heading_deg[(turns.wheel_deg == w) & (turns.reversed_ == back)] for w, back in cells]
    pooled = np.sqrt(sum(np.sum((one - one.mean()) ** 2) for one in repeats) / (15 - 4))
    assert_allclose([one.mean_deg.u * np.sqrt(one.n) for one in found.cells], pooled, rtol=1e-9)
    assert_allclose(found.repeatability_deg.value, np.sqrt(pooled**2 - 0.02**2), rtol=1e-9)


def test_runs_widen_means():
    table = driven(5, blocks=3, runs=4, between_deg=2.0)
    found = judged(table)
    assert found.runs.between.low < 2.0 < found.runs.between.high
    cell = found.cells[0]
    rows = (table.turns.wheel_deg == cell.wheel_deg) & (table.turns.reversed_ == float(cell.after_reversal))
    assert cell.mean_deg.u > 1.5 * table.turns.heading_deg[rows].std(ddof=1) / np.sqrt(rows.sum())


def test_what_was_not_recorded_is_said():
    table = driven(6)
    found = judge(plain_table(table.turns), fit_turns(table.turns))
    assert found.grain is None
    assert found.warp is None
    assert check(found, "grain").reason == "the start headings are not known"
    assert check(found, "slope of place").reason == "the places of the turns are not known"
    assert check(found, "runs").reason == "there is one run only"
    assert all(np.isnan(one.p_value) for one in found.checks if one.reason)


@pytest.mark.parametrize("wheel", [[190.0] * 8, [190.0] * 3, [190.0, 380.0, -190.0, -380.0, 95.0]])
def test_odd_plans_give_answers_or_reasons(wheel):
    table = driven(7, wheel_deg=wheel)
    found = judged(table)
    for one in found.checks:
        assert np.isfinite(one.p_value) != bool(one.reason)
    for cell in found.cells:
        assert (cell.repeatability_deg is None) == (cell.n == 1)
        assert np.isfinite(cell.mean_deg.low) == any(one.n > 1 for one in found.cells)


def test_turns_that_do_not_scatter():
    wheel = np.tile([190.0, 190.0, -190.0, -190.0], 4)
    turns = Turns(wheel_deg=wheel, heading_deg=0.5 * wheel, u_deg=np.zeros(16), reversed_=np.tile([0.0, 1.0], 8))
    found = judge(plain_table(turns), fit_turns(turns))
    assert found.repeatability_deg.value == 0.0
    assert not found.seen()
    assert found.drift.trend.p_value == 1.0


def test_half_revolutions_feel_no_grain():
    table = driven(8, wheel_deg=np.tile([375.0, 375.0, -375.0, -375.0], 4), band_wheel_deg=0.0, scatter_deg=0.2)
    assert "half or whole revolutions" in check(judged(table), "grain").reason


def test_start_headings_that_do_not_vary():
    wheel = np.tile([187.5, -187.5], 12)
    table = driven(9, wheel_deg=wheel, band_wheel_deg=0.0, scatter_deg=0.05)
    assert "start headings were not varied" in check(judged(table), "grain").reason


def test_a_factor_that_changes_with_the_run_only():
    table = driven(11, runs=2, blocks=3)
    day = dataclasses.replace(table, factors={"day": table.run})
    assert "compare the turns by it" in check(judged(day), "factor day").reason


def test_columns_of_factors():
    labels, columns = columns_of(["slow", "fast", "slow", "fast"])
    assert labels == ("fast against slow",)
    assert columns[:, 0].tolist() == [0.0, 1.0, 0.0, 1.0]
    labels, columns = columns_of(["1", "2", "3", "2"])
    assert labels == ("per unit",)
    assert columns[:, 0].tolist() == [-1.0, 0.0, 1.0, 0.0]
    with pytest.raises(NotIdentified, match="one value"):
        columns_of(["a", "a"])
    with pytest.raises(NotIdentified, match="once only"):
        columns_of(["a", "b", "c", "a"])
