"""Charts of single values against the published example, and their signals."""

import numpy as np
import pytest
from numpy.testing import assert_allclose
from scipy import integrate, stats

from calib.control_chart import D2, D4, individuals_chart
from calib.errors import NotEnoughTurns


def test_the_published_chart_of_flow_rates():
    # NIST/SEMATECH e-Handbook of Statistical Methods 6.3.2.2, flow rate of ten batches (values from memory, arithmetic
    # recomputed): mean 50.81, mean moving range 1.8778, limits 45.8159 and 55.8041 with d2 = 1.128.
    chart = individuals_chart([49.6, 47.6, 49.9, 51.3, 47.8, 51.2, 52.6, 52.4, 53.6, 52.1])
    assert_allclose(chart.centre, 50.81, atol=5e-3)
    assert_allclose(chart.mean_range, 1.8778, atol=5e-5)
    assert_allclose([chart.low, chart.high], [45.8159, 55.8041], atol=2e-3)  # d2 = 1.128 there, 1.12838 here
    assert chart.signals == ()


def test_the_constants_are_those_of_two_normal_values():
    # d2 is the mean of |x1 - x2|, d3 its standard deviation, D4 = 1 + 3 d3 / d2 (ISO 7870-2; by scipy here).
    mean = integrate.quad(lambda r: r * 2.0 * stats.norm.pdf(r, scale=np.sqrt(2.0)), 0.0, np.inf)[0]
    square = integrate.quad(lambda r: r**2 * 2.0 * stats.norm.pdf(r, scale=np.sqrt(2.0)), 0.0, np.inf)[0]
    assert_allclose(D2, mean, rtol=1e-9)
    assert_allclose(D4, 1.0 + 3.0 * np.sqrt(square - mean**2) / mean, atol=5e-4)


def signals(values):
    return {(one.index, one.kind) for one in individuals_chart(values).signals}


def test_a_value_far_out_is_named_with_its_jumps():
    rng = np.random.default_rng(1)
    values = rng.normal(size=30)
    values[20] += 9.0
    found = signals(values)
    assert (20, "beyond the limits") in found
    assert (20, "jump") in found


def test_a_lasting_shift_is_named_at_the_seventh_value():
    values = np.tile([0.9, -1.0], 10)
    values = np.append(values, np.array([0.6, 0.7, 0.5, 0.8, 0.6, 0.7, 0.5, 0.6]))
    assert {one for one in signals(values) if one[1] == "one side"} == {(26, "one side")}


def test_a_steady_climb_is_named_at_the_seventh_value():
    values = np.append(np.tile([3.0, -3.0], 8), np.linspace(-2.5, 2.5, 8))  # from the last -3 on they rise
    assert (21, "rising") in signals(values)
    assert (21, "falling") in signals(-values)


def test_false_alarms_of_the_limits_are_as_rare_as_they_should_be():
    # 3 standard deviations either way: 0.27 % of normal values; estimated limits make it somewhat more.
    rng = np.random.default_rng(7)
    far = [
        sum(s.kind == "beyond the limits" for s in individuals_chart(rng.normal(size=50)).signals) for _ in range(400)
    ]
    assert 0.002 < np.sum(far) / (400 * 50) < 0.006


def test_two_values_make_no_chart():
    with pytest.raises(NotEnoughTurns, match="at least 3"):
        individuals_chart([1.0, 2.0])
