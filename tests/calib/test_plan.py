from collections import Counter

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from numpy.testing import assert_allclose

from calib.errors import CalibError
from calib.order import balanced_order, merit, naive_order
from calib.plan import Wanted, make_plan, missing_after, needs_of
from calib.sample_size import repeats_for_hit_rate, repeats_for_mean, repeats_to_detect
from calib.turns import Turns, reversals


@settings(max_examples=30, deadline=None)
@given(
    st.lists(st.integers(1, 40), min_size=1, max_size=4, unique=True), st.integers(1, 4), st.integers(0, 2**32 - 1)
)
def test_every_block_holds_every_combination_once(sizes, blocks, seed):
    order = balanced_order([10.0 * size for size in sizes], blocks, seed)
    state = order.reversed_
    assert np.isnan(state[0])
    for block in range(1, blocks + 1):
        rows = np.array(order.block) == block
        combinations = Counter(zip(order.wheel_deg[rows], state[rows], strict=True))
        assert len(combinations) == 4 * len(sizes)
        assert set(combinations.values()) == {1}
    changes = Counter(zip(np.sign(order.wheel_deg[:-1]), np.sign(order.wheel_deg[1:]), strict=True))
    assert len(set(changes.values())) == 1
    assert len(changes) == 4
    assert np.array_equal(order.wheel_deg, balanced_order([10.0 * size for size in sizes], blocks, seed).wheel_deg)


def test_seeds_give_different_orders():
    assert not np.array_equal(balanced_order([95, 190], 3, 1).wheel_deg, balanced_order([95, 190], 3, 2).wheel_deg)


def test_uncertainties_are_those_of_least_squares():
    """Source: Monte Carlo of the stated design; 4000 trials, so 1.1 per cent by chance, four times that allowed."""
    order = balanced_order([95.0, 190.0], 2, 0)
    found = merit(order.wheel_deg, naive_order([95.0, 190.0], len(order.wheel_deg)))
    wheel = order.wheel_deg
    state = reversals(wheel, slack_known=np.arange(len(wheel)) > 0)[1:]
    size, side = np.abs(wheel[1:]) / 190.0, np.sign(wheel[1:])
    time = np.linspace(-0.5, 0.5, len(side))
    design = np.column_stack([size * (side > 0), size * (side < 0), -state, time * size, side])
    noise = np.random.default_rng(1).normal(size=(len(side), 4000))
    scattered = np.linalg.lstsq(design, noise, rcond=None)[0].std(axis=1)
    assert_allclose(found.u_planned, scattered, rtol=4 * 0.0112)


@pytest.mark.parametrize("sizes", [[190.0], [95.0, 190.0, 380.0]])
@pytest.mark.parametrize("blocks", [1, 3, 8])
def test_the_planned_order_is_worth_more_than_the_naive_one(sizes, blocks):
    found = make_plan(sizes, repeats=blocks).merit
    assert found.d_efficiency > 1.7
    lost = 2
    assert found.u_planned[lost] < found.u_other[lost]
    assert found.u_planned[lost + 1] < found.u_other[lost + 1]


def test_an_order_that_cannot_tell_a_quantity_says_so():
    planned = balanced_order([190.0], 2, 0).wheel_deg
    one_way = np.full(len(planned), 190.0)
    found = merit(planned, one_way)
    assert np.isinf(found.d_efficiency)
    assert np.isinf(found.u_other[1])
    assert np.isfinite(found.u_other[0])
    with pytest.raises(CalibError, match="cannot tell direction"):
        merit(one_way, planned)


def test_needs_are_those_of_the_sample_sizes():
    wanted = Wanted(mean_deg=0.4, detect_deg=1.0, hit_rate=(0.15, 0.9))
    found = {need.what: need.repeats for need in needs_of(wanted, 2, 0.6)}
    assert list(found.values()) == [
        repeats_for_mean(0.4, 0.6, commands=8),
        repeats_to_detect(1.0, 0.6),
        repeats_for_hit_rate(0.15, 0.9),
    ]
    plan = make_plan([95.0, -190.0, 190.0], needs_of(wanted, 2, 0.6))
    assert plan.repeats == max(found.values())
    assert plan.sizes_wheel_deg == (95.0, 190.0)
    assert len(plan.order.wheel_deg) == 1 + 8 * plan.repeats


def test_what_is_missing_is_counted():
    turns = Turns(
        wheel_deg=np.array([190.0, 190.0, -190.0, -190.0, 190.0]),
        heading_deg=np.array([91.0, 91.0, -91.0, -91.0, 91.0]),
        u_deg=np.zeros(5),
        reversed_=np.array([np.nan, 0.0, 1.0, 0.0, 1.0]),
    )
    found = missing_after(turns, [190.0, 95.0], 2)
    assert {(one.wheel_deg, one.after_reversal): (one.have, one.missing) for one in found} == {
        (95.0, False): (0, 2),
        (95.0, True): (0, 2),
        (-95.0, False): (0, 2),
        (-95.0, True): (0, 2),
        (190.0, False): (1, 1),
        (190.0, True): (1, 1),
        (-190.0, False): (1, 1),
        (-190.0, True): (1, 1),
    }


def test_what_cannot_be_planned_is_refused():
    with pytest.raises(CalibError, match="scatter of single turns must be known"):
        needs_of(Wanted(mean_deg=0.1), 1)
    with pytest.raises(CalibError, match="more than 5000"):
        make_plan([190.0], needs_of(Wanted(mean_deg=0.02), 1, 1.0))
    with pytest.raises(ValueError, match="wheel degrees above 0"):
        balanced_order([0.0], 1)
    with pytest.raises(ValueError, match="1 or more"):
        balanced_order([190.0], 0)
