"""The worked example and the constants of docs/uncertainty.md, held to the code."""

import re
from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest
from numpy.testing import assert_allclose

from tests.vision.synthetic import seen_from
from vision import bundle, lag, rests
from vision.budget import HAND_S, REDUNDANCY, RestHeading, change_uncertainty, frozen_share, pooled_share
from vision.lag import Lag
from vision.plane import N_GLOBAL
from vision.rests import Stretch

PAGE = (Path(__file__).resolve().parents[2] / "docs" / "uncertainty.md").read_text(encoding="utf-8")
EXAMPLE = PAGE.split("## A worked example")[1].split("\n## ")[0]
FIRST, SECOND = np.arange(0, 20), np.arange(30, 50)


def given(pattern):
    """Return the one number that the example gives in these words."""
    found = re.findall(pattern, " ".join(EXAMPLE.split()))
    assert len(found) == 1, f"{pattern}: found {found}"
    return float(found[0])


def variances_1e6():
    """Return the right-hand column of the example's table, by the first word of the row."""
    rows = re.findall(r"^\| (\w+).*\| ([\d.]+) \|$", EXAMPLE, flags=re.MULTILINE)
    return {word: float(value) for word, value in rows}


@pytest.fixture(scope="module")
def example():
    """The example's numbers as the page states them, and the heading change built from them."""
    u_frame = given(r"single frame's heading has `u = ([\d.]+)` degrees")
    shares = given(r"leaves ([\d.]+) of that variance"), given(r"the one rest, ([\d.]+) at the other")
    u_lag, u_plane = given(r"lag is ([\d.]+) degrees"), given(r"plane's part is ([\d.]+) degrees")
    seen = seen_from(np.arange(50) / 30.0, np.zeros(50), noise_deg=u_frame)
    left, by_global = np.zeros((50, 16)), np.zeros((50, N_GLOBAL))
    for frames, share in zip((FIRST, SECOND), shares, strict=True):
        left[frames] = np.sqrt(REDUNDANCY * share / 16.0)
    by_global[SECOND, 0] = u_plane
    cov = np.zeros((N_GLOBAL, N_GLOBAL))
    cov[0, 0] = 1.0
    return replace(seen, left=left, by_global=by_global), shares, Lag(u_lag, 5), cov


def rest(frames, *, lags=False):
    return RestHeading(still=Stretch(int(frames[0]), int(frames[-1])), lags=lags, before=frames, after=frames)


def test_the_page_computes_what_the_code_computes(example):
    seen, shares, coding, cov = example
    clip_share = pooled_share(seen.left, [rest(FIRST), rest(SECOND)])
    assert_allclose(clip_share, given(r"([\d.]+) on the mean of the clip"), rtol=1e-12)
    for frames, share in zip((FIRST, SECOND), shares, strict=True):
        assert_allclose(frozen_share(seen.left, frames), share, rtol=1e-12)
    u = change_uncertainty(seen, rest(FIRST), rest(SECOND, lags=True), cov, clip_share, coding, camera_still=True)
    print(f"u = {u:.4f} deg, expanded uncertainty {2.0 * u:.3f} deg")
    assert f"{u:.4f}" == f"{given(r'so `u = ([0-9.]+)` degrees'):.4f}"
    assert f"{2.0 * u:.3f}" == f"{given(r'expanded uncertainty is ([0-9.]+) degrees'):.3f}"
    assert_allclose(1e6 * u**2, variances_1e6()["sum"], rtol=1e-9)


def test_each_row_of_the_table_is_its_own_contribution(example):
    seen, _, coding, cov = example
    rows, none = variances_1e6(), np.zeros((N_GLOBAL, N_GLOBAL))
    share, silent = pooled_share(seen.left, [rest(FIRST), rest(SECOND)]), Lag(0.0, 0)
    zero = replace(seen, left=np.zeros((50, 16)))

    def variance(data, cov, lag_, share, *, lags):
        pair = rest(FIRST), rest(SECOND, lags=lags)
        return 1e6 * change_uncertainty(data, *pair, cov, share, lag_, camera_still=True) ** 2

    assert_allclose(variance(seen, none, silent, share, lags=False), rows["first"] + rows["second"], rtol=1e-9)
    assert_allclose(variance(zero, none, coding, 0.0, lags=True), rows["lag"], rtol=1e-9)
    assert_allclose(variance(zero, cov, silent, 0.0, lags=False), rows["plane"], rtol=1e-9)
    assert_allclose(sum(rows[k] for k in ("first", "second", "lag", "plane")), rows["sum"], rtol=1e-9)


@pytest.mark.parametrize(
    ("words", "value"),
    [
        (r"The ([\d.]+) others show", REDUNDANCY),
        (r"one usual one of ([\d.]+) px", lag.USUAL_LAG_PX),
        (r"within ([\d.]+) degrees of heading count as one", np.degrees(bundle.SECTOR_RAD)),
        (r"only stretches of ([\d.]+) s count as independent", HAND_S),
        (r"by less than ([\d.]+) degrees", rests.SMALLEST_NUDGE_DEG),
    ],
)
def test_constants_on_the_page_are_those_of_the_code(words, value):
    found = re.findall(words, " ".join(PAGE.split()))
    assert len(found) == 1, f"{words}: found {found}"
    assert_allclose(float(found[0]), value, rtol=1e-9)
