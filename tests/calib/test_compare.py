import numpy as np
import pytest
from numpy.testing import assert_allclose

from calib.compare import CANNOT_TELL, DIFFERENT, SAME, compare_tables
from calib.errors import CalibError, NotEnoughTurns, NotIdentified
from calib.table import plain_table
from calib.turns import Turns
from tests.calib.driven import driven


def table(seed, **say):
    return driven(seed, factors=False, **say)


def test_the_same_floor_twice_is_the_same():
    found = compare_tables([("cork", table(1)), ("cork again", table(2))], margin_deg=1.5)
    assert [pair.verdict for pair in found.pairs] == [SAME, SAME]
    assert [pair.wanted_deg for pair in found.pairs] == [90.0, -90.0]
    assert all(abs(pair.heading_deg.value) < 0.5 for pair in found.pairs)
    (spread,) = found.spreads
    assert spread.ratio.low < 1.0 < spread.ratio.high
    assert found.together == ()


def test_another_gain_is_different_and_its_command_is_right():
    found = compare_tables([("cork", table(1)), ("lino", table(2, gain=0.50))])
    for pair in found.pairs:
        assert pair.verdict == DIFFERENT
        assert pair.gain_relative.low < 0.02 / 0.48 < pair.gain_relative.high
        true = pair.wanted_deg * (1 / 0.50 - 1 / 0.48)
        assert pair.command_wheel_deg.low < true < pair.command_wheel_deg.high
        assert_allclose(
            pair.commands_wheel_deg[1] - pair.commands_wheel_deg[0], pair.command_wheel_deg.value, atol=1e-9
        )
        change = pair.wanted_deg * (0.50 / 0.48 - 1)
        assert pair.heading_deg.low < change < pair.heading_deg.high


def test_few_rough_turns_cannot_tell_and_more_would():
    rough = {"blocks": 1, "scatter_deg": 1.5}
    found = compare_tables([("cork", table(3, **rough)), ("lino", table(4, **rough))], wanted_deg=[90.0])
    (pair,) = found.pairs
    assert pair.verdict == CANNOT_TELL
    assert pair.more is None or pair.more > 1
    assert pair.more_of == "turns"


def test_three_at_once_with_spreads():
    tables = [("a", table(1)), ("b", table(2)), ("c", table(3, gain=0.5, scatter_deg=2.0))]
    found = compare_tables(tables)
    assert len(found.pairs) == 6
    assert len(found.spreads) == 3
    assert all(one.p_value < 0.05 for one in found.together)
    with_c = [one for one in found.spreads if one.second == "c"]
    assert all(one.p_f < 0.01 and one.ratio.low > 1.5 for one in with_c)
    assert found.spread_together[1] < 0.01


def test_runs_that_differ_widen_what_is_compared():
    one = compare_tables([("a", table(1, runs=3, blocks=2)), ("b", table(2, runs=3, blocks=2))])
    far = {"runs": 3, "blocks": 2, "between_deg": 2.0}
    two = compare_tables([("a", table(1, **far)), ("b", table(2, **far))])
    assert two.pairs[0].heading_deg.u > 2.0 * one.pairs[0].heading_deg.u
    assert two.pairs[0].heading_dof < 6
    assert two.pairs[0].more_of == "runs" or two.pairs[0].verdict != CANNOT_TELL
    assert any("differ among themselves" in note for note in two.notes)
    assert not any("one run only" in note for note in two.notes)


def test_swapping_the_two_changes_the_signs_only():
    a, b = table(1), table(2, gain=0.49)
    there, back = (compare_tables(pair, wanted_deg=[90.0]) for pair in ([("a", a), ("b", b)], [("b", b), ("a", a)]))
    assert_allclose(there.pairs[0].command_wheel_deg.value, -back.pairs[0].command_wheel_deg.value, rtol=1e-9)
    assert_allclose(there.spreads[0].ratio.value, 1 / back.spreads[0].ratio.value, rtol=1e-9)
    assert there.pairs[0].verdict == back.pairs[0].verdict


def turns(wheel, heading, u=0.0):
    wheel = np.array(wheel, dtype=float)
    return plain_table(
        Turns(
            wheel_deg=wheel,
            heading_deg=np.array(heading, dtype=float),
            u_deg=np.full(len(wheel), u),
            reversed_=np.full(len(wheel), np.nan),
        )
    )


def test_what_cannot_be_compared_is_said():
    good = table(1)
    with pytest.raises(NotEnoughTurns, match="1 to compare"):
        compare_tables([("cork", good)])
    with pytest.raises(NotEnoughTurns, match="lino: 1 usable turns; at least 3"):
        compare_tables([("cork", good), ("lino", turns([190], [91]))])
    with pytest.raises(NotEnoughTurns, match="cork: 1 usable turns"):
        compare_tables([("cork", turns([190], [91])), ("lino", turns([190], [91]))])
    with pytest.raises(CalibError, match="one name"):
        compare_tables([("cork", good), ("cork", good)])
    with pytest.raises(NotIdentified, match="no direction was driven in all"):
        compare_tables([("a", turns([190] * 4, [91, 92, 91, 90])), ("b", turns([-190] * 4, [-91, -92, -91, -90]))])
    with pytest.raises(NotIdentified, match="b: no turn is clockwise"):
        compare_tables([("a", good), ("b", turns([190] * 4, [91, 92, 91, 90]))], wanted_deg=[-90.0])
    with pytest.raises(ValueError, match="wanted angle 0"):
        compare_tables([("a", good), ("b", good)], wanted_deg=[0.0])
    with pytest.raises(ValueError, match="margin"):
        compare_tables([("a", good), ("b", good)], margin_deg=-1.0)


def test_turns_that_do_not_scatter_are_compared_without_nonsense():
    same, more = turns([190, 190, 190, 190], [91.0] * 4), turns([190, 190, 190, 190], [93.0] * 4)
    found = compare_tables([("a", same), ("b", more)])
    (pair,) = found.pairs
    assert pair.verdict == DIFFERENT
    assert_allclose(pair.heading_deg.value, 90.0 * 93 / 91 - 90.0, rtol=1e-6)
    assert np.isnan(found.spreads[0].ratio.value)
    assert any("do not scatter" in note for note in found.notes)
    (alike,) = compare_tables([("a", same), ("b", same)]).pairs
    assert alike.verdict == SAME
