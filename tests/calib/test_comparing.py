import numpy as np
import pytest
from numpy.testing import assert_allclose
from scipy import stats
from statsmodels.stats.multitest import multipletests
from statsmodels.stats.oneway import anova_oneway
from statsmodels.stats.weightstats import ttost_ind

from calib.differences import all_alike, difference, two_sided, welch_dof
from calib.equivalence import chance_to_show, two_one_sided
from calib.holm import holm
from calib.spreads import brown_forsythe, spread_ratio
from tests.reference import columns

PLANTS = (
    [4.17, 5.58, 5.18, 6.11, 4.50, 4.61, 5.17, 4.53, 5.33, 5.14],
    [4.81, 4.17, 4.41, 3.59, 5.87, 3.83, 6.03, 4.89, 4.32, 4.69],
    [6.31, 5.12, 5.54, 5.50, 5.37, 5.29, 4.92, 6.15, 5.80, 5.26],
)


def against(first, second):
    u = [np.std(one, ddof=1) / np.sqrt(len(one)) for one in (first, second)]
    return difference(
        np.mean(first),
        np.mean(second),
        u_first=u[0],
        u_second=u[1],
        dof_first=len(first) - 1,
        dof_second=len(second) - 1,
        confidence=0.95,
    )


def test_car_mileage():
    """Source: NIST/SEMATECH e-Handbook 1.3.5.3, as in the manual of Boost.Math: Welch t -12.946 with 136.87 df."""
    data = columns("nist-auto83b.csv")
    first = [float(one) for one in data["us_mpg"] if one]
    second = [float(one) for one in data["japan_mpg"] if one]
    found, dof, p = against(first, second)
    assert_allclose(-found.value / found.u, -12.946, atol=5e-4)
    assert_allclose(dof, 136.87, atol=5e-3)
    assert_allclose(p, 2 * 7.855e-26, rtol=1e-3)


def test_sleep():
    """Source: Student (1908), Welch's test as R prints it: t -1.8608, df 17.776, p 0.07939, -3.365 to 0.205."""
    first = [0.7, -1.6, -0.2, -1.2, -0.1, 3.4, 3.7, 0.8, 0.0, 2.0]
    second = [1.9, 0.8, 1.1, 0.1, -0.1, 4.4, 5.5, 1.6, 4.6, 3.4]
    found, dof, p = against(first, second)
    assert_allclose([-found.value / found.u, dof, p], [-1.860813467, 17.77647352, 0.07939414], rtol=1e-7)
    assert_allclose([-found.high, -found.low], [-3.3654832, 0.2054832], atol=5e-8)


def test_effective_degrees_of_freedom():
    """Source: JCGM 100:2008, G.4.2 for three contributions (here pooled two by two as the formula allows): 19.0."""
    first = np.hypot(0.25, 0.57)
    dof = welch_dof(first, welch_dof(0.25, 9, 0.57, 4), 0.82, 14)
    assert_allclose(dof, 19.0, atol=0.05)


def test_plant_growth():
    """Source: PlantGrowth of R, Welch's one-way test: F 5.181, 2 and 17.128 df, p 0.01739."""
    means = [np.mean(one) for one in PLANTS]
    u = [np.std(one, ddof=1) / np.sqrt(10) for one in PLANTS]
    found = all_alike(means, u, [9, 9, 9])
    assert_allclose(found, [5.181, 2.0, 17.128, 0.01739], atol=5e-4)
    assert_allclose(found[3], 0.01739, atol=5e-6)
    reference = anova_oneway(PLANTS, use_var="unequal", welch_correction=True)
    assert_allclose([found[0], found[2], found[3]], [reference.statistic, reference.df_denom, reference.pvalue])


def test_yield_equivalence():
    """Source: NCSS manual p. 198-1 as quoted by TOSTER, Welch: p 0.03628 and 0.02002."""
    data = columns("tost-ncss-yield.csv")
    groups = [
        [float(y) for y, one in zip(data["y"], data["group"], strict=True) if one == name] for name in ("A", "B")
    ]
    second, first = sorted(groups, key=len)
    if np.mean(second) > np.mean(first):
        first, second = second, first
    found, dof, _ = against(first, second)
    assert_allclose([found.value, found.u, dof], [-8.1153846, 53.618547, 19.169], rtol=3e-5)
    assert_allclose([found.low, found.high], [-120.27336, 104.04259], atol=5e-5)
    same = two_one_sided(found.value, found.u, dof, 110.0)
    assert_allclose(sorted([same.p_above_low, same.p_below_high]), [0.02002, 0.03628], atol=6e-6)
    reference = ttost_ind(np.array(second), np.array(first), -110, 110, usevar="unequal")
    assert_allclose(same.p_value, reference[0], rtol=1e-9)
    assert (same.p_value < 0.05) == (max(abs(same.difference.low), same.difference.high) < 110)


def test_judgement_study_equivalence():
    """Source: TOSTER test-known_results: t 3.14973 and -2.692771, df 181.1344, p 0.0009560083 and 0.003875522."""
    u = [0.95 / np.sqrt(95), 0.83 / np.sqrt(89)]
    dof = welch_dof(u[0], 94, u[1], 88)
    same = two_one_sided(5.25 - 5.22, np.hypot(*u), dof, 0.43 * np.sqrt((0.95**2 + 0.83**2) / 2))
    assert_allclose([dof, same.t_above_low, same.t_below_high], [181.1344, 3.14973, -2.692771], rtol=1e-6)
    assert_allclose([same.p_above_low, same.p_below_high], [0.0009560083, 0.003875522], rtol=1e-6)


def test_one_sample_equivalence():
    """Source: TOSTER test-known_results: t 3.333333, -2.666667, p 0.0006040021, 0.004474619."""
    same = two_one_sided(0.54 - 0.5, 1.2 / 10, 99, 0.36)
    assert_allclose([same.t_above_low, same.t_below_high], [3.333333, -2.666667], atol=5e-7)
    assert_allclose([same.p_above_low, same.p_below_high], [0.0006040021, 0.004474619], rtol=1e-7)


def test_chance_to_show_equivalence_is_what_happens():
    """Monte Carlo; 20 000 trials, four standard errors of the chance."""
    rng = np.random.default_rng(4)
    difference_, u, dof, margin = 0.2, 0.3, 9, 1.0
    found = difference_ + u * rng.normal(size=20000)
    u_found = u * np.sqrt(rng.chisquare(dof, 20000) / dof)
    shown = np.abs(found) + stats.t.ppf(0.95, dof) * u_found < margin
    assert_allclose(chance_to_show(difference_, u, dof, margin), shown.mean(), atol=4 * 0.5 / np.sqrt(20000))


def test_gear_spreads():
    """Source: NIST/SEMATECH e-Handbook 1.3.5.10, gear data: Brown-Forsythe 1.705910, p 0.0991."""
    data = columns("nist-gear.csv")
    batches = [
        [float(y) for y, one in zip(data["diameter"], data["batch"], strict=True) if one == str(k)]
        for k in range(1, 11)
    ]
    f, p = brown_forsythe(batches)
    assert_allclose([f, p], [1.705910, 0.0991], atol=2e-5)


def test_spread_ratio_is_the_f_test():
    """Source: definition of the F interval, inverted at its ends with scipy.stats.f."""
    ratio, p = spread_ratio(2.0, 9, 3.0, 14, 0.95)
    assert_allclose(stats.f.cdf((1.5 / ratio.low) ** 2, 14, 9), 0.975, rtol=1e-9)
    assert_allclose(stats.f.cdf((1.5 / ratio.high) ** 2, 14, 9), 0.025, rtol=1e-9)
    assert_allclose(p, 2 * stats.f.sf(2.25, 14, 9), rtol=1e-9)
    back, p_back = spread_ratio(3.0, 14, 2.0, 9, 0.95)
    assert_allclose([back.low, back.high, p_back], [1 / ratio.high, 1 / ratio.low, p], rtol=1e-9)


def test_holm():
    """Source: reference library statsmodels, and the steps of Holm (1979) by hand."""
    p = [0.01, 0.04, 0.03, 0.005]
    assert_allclose(holm(p), [0.03, 0.06, 0.06, 0.02])
    rng = np.random.default_rng(6)
    p = rng.uniform(size=9) ** 3
    assert_allclose(holm(p), multipletests(p, method="holm")[1])
    assert_allclose(holm([0.01, np.nan, 0.5]), [0.02, np.nan, 0.5])
    assert len(holm([])) == 0


def test_nothing_scatters():
    assert two_sided(0.0, 0.0, 5) == 1.0
    assert two_sided(0.1, 0.0, 5) == 0.0
    assert two_one_sided(0.1, 0.0, 5, 1.0).p_value == 0.0
    assert two_one_sided(2.0, 0.0, 5, 1.0).p_value == 1.0
    assert np.isnan(spread_ratio(0.0, 5, 1.0, 5, 0.95)[1])
    assert np.isnan(brown_forsythe([[1.0, 1.0], [2.0, 2.0]])[1])
    assert np.isnan(brown_forsythe([[1.0], [2.0, 3.0]])[1])
    with pytest.raises(ValueError, match="margin"):
        two_one_sided(0.0, 1.0, 5, 0.0)
