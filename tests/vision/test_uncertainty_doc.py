"""The worked example and the constants of docs/uncertainty.md, held to the code."""

import re
from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest
from numpy.testing import assert_allclose

from tests.vision.synthetic import seen_from
from vision import budget, bundle, lag, rests
from vision.budget import (
    STEADY,
    ClipErrors,
    RestHeading,
    change_uncertainty,
    freedoms,
    frozen_share,
    parts_of_change,
    pooled_share,
)
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


def table():
    """Return variance (1e-6 deg^2) and degrees of freedom of the example's rows, by their first word."""
    rows = re.findall(r"^\| (\w+).*\| ([\d.]+) \| (\d+) \|$", EXAMPLE, flags=re.MULTILINE)
    return {word: (float(variance), float(freedom)) for word, variance, freedom in rows}


def rest(frames, *, lags=False, behind_deg=0.0):
    still = Stretch(int(frames[0]), int(frames[-1]))
    return RestHeading(still=still, lags=lags, before=frames, after=frames, behind_deg=behind_deg)


@pytest.fixture(scope="module")
def example():
    """The example's numbers as the page states them, and the heading change built from them."""
    u_frame = given(r"single frame's heading has `u = ([\d.]+)` degrees")
    shares = given(r"leaves ([\d.]+) of that variance"), given(r"the one rest, ([\d.]+) at the other")
    u_lag, u_plane = given(r"lag is ([\d.]+) degrees"), given(r"plane's part is ([\d.]+) degrees")
    behind_deg, n_jumps = given(r"for which ([\d.]+) degrees were added"), int(given(r"from (\d+) jumps"))
    plain = seen_from(np.arange(50) / 30.0, np.zeros(50), noise_deg=u_frame)
    heading_deg = np.where(np.arange(50) < 25, 0.0, -behind_deg)
    left, by_global = np.zeros((50, 16)), np.zeros((50, N_GLOBAL))
    for frames, share in zip((FIRST, SECOND), shares, strict=True):
        left[frames] = np.sqrt(budget.REDUNDANCY * share / 16.0)
    by_global[SECOND, 0] = u_plane
    cov = np.zeros((N_GLOBAL, N_GLOBAL))
    cov[0, 0] = 1.0
    seen = replace(plain, heading_deg=heading_deg, left=left, by_global=by_global)
    pair = rest(FIRST), rest(SECOND, lags=True, behind_deg=behind_deg)
    errors = ClipErrors(
        cov=cov,
        share=pooled_share(left, pair),
        lag=Lag(u_lag, n_jumps),
        view=STEADY,
        n_rests=2,
        plane_freedom=given(r"with (\d+) degrees of freedom"),
    )
    return seen, shares, pair, errors


def test_the_page_computes_what_the_code_computes(example):
    seen, shares, pair, errors = example
    assert_allclose(errors.share, given(r"([\d.]+) on the mean of the clip"), rtol=1e-12)
    for frames, share in zip((FIRST, SECOND), shares, strict=True):
        assert_allclose(frozen_share(seen.left, frames), share, rtol=1e-12)
    found = change_uncertainty(seen, *pair, errors)
    print(f"u = {found.u:.4f} deg, k = {found.coverage_factor:.2f}, expanded uncertainty {found.expanded:.3f} deg")
    assert f"{found.u:.4f}" == f"{given(r'so `u = ([0-9.]+)` degrees'):.4f}"
    assert f"{found.coverage_factor:.2f}" == f"{given(r'factor for 95 % is ([0-9.]+),'):.2f}"
    assert f"{found.expanded:.3f}" == f"{given(r'expanded uncertainty is ([0-9.]+) degrees'):.3f}"
    assert_allclose(1e6 * found.u**2, table()["sum"][0], rtol=1e-9)
    assert np.floor(found.degrees_of_freedom) == table()["sum"][1]


def test_each_row_of_the_table_is_its_own_contribution(example):
    seen, _, pair, errors = example
    parts, freedom, rows = parts_of_change(seen, *pair, errors), freedoms(errors), table()
    named = {"rests": "rests", "lag": "lag", "catching": "behind", "plane": "plane"}
    for row, name in named.items():
        assert_allclose(1e6 * getattr(parts, name), rows[row][0], rtol=1e-9)
        assert np.floor(freedom[name]) == rows[row][1]
    assert_allclose(sum(rows[row][0] for row in named), rows["sum"][0], rtol=1e-9)
    assert parts.view == 0.0
    assert parts.edges < 1e-20


@pytest.mark.parametrize(
    ("words", "value"),
    [
        (r"The ([\d.]+) others show", budget.REDUNDANCY),
        (r"([\d.]+) of that variance counts for the heading", budget.HEADING_SHARE),
        (r"with two usual ones of ([\d.]+) px", lag.USUAL_LAG_PX),
        (r"displace a marker by ([\d.]+) px", budget.EDGES_PX),
        (r"frames within ([\d.]+) degrees of heading err alike", np.degrees(bundle.ALIKE_RAD)),
        (r"as many as sectors of ([\d.]+) degrees", np.degrees(budget.PLANE_SECTOR_RAD)),
        (r"only stretches of ([\d.]+) s count as independent", budget.HAND_S),
        (r"by less than ([\d.]+) degrees", rests.SMALLEST_NUDGE_DEG),
    ],
)
def test_constants_on_the_page_are_those_of_the_code(words, value):
    found = re.findall(words, " ".join(PAGE.split()))
    assert len(found) == 1, f"{words}: found {found}"
    assert_allclose(float(found[0]), value, rtol=1e-9)
