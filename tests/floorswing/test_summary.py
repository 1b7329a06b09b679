"""The short table and the plain sentence."""

from __future__ import annotations

import math
from dataclasses import replace

import numpy as np
from numpy.testing import assert_allclose

from floorswing.commands_file import Commands
from floorswing.matching import match_clip
from floorswing.summary import pooled_scatter_deg, turns_table

from .conftest import clip_result


def matched(changes_deg, wheel_deg):
    return match_clip(clip_result(changes_deg), Commands(wheel_deg=tuple(wheel_deg))).turns


def test_the_table_aligns_numbers_and_shows_expanded_uncertainty():
    turns = matched([90.1, -181.25, 9.5], [190, -380, 20.5])
    assert turns_table(turns).splitlines() == [
        "turn  start s  wheel deg  heading change deg  flags",
        "   1     2.00       +190     +90.100 ± 0.040",
        "   2     5.00       -380    -181.250 ± 0.040",
        "   3     8.00      +20.5      +9.500 ± 0.040",
    ]


def test_a_long_table_is_cut_in_the_middle():
    turns = matched([90.0, -90.0] * 50, [190, -190] * 50)
    lines = turns_table(turns).splitlines()
    assert len(lines) == 32
    assert lines[16].split() == ["..."] * 4 + ["70", "more"]
    assert lines[-1].split()[0] == "100"


def test_pooled_scatter_against_a_plain_calculation():
    """Source: pooled standard deviation, here through numpy on each group, as in ISO 5725-2, 7.4.5."""
    changes = [90.1, -89.0, 90.5, -90.0, 91.3, 180.0]
    turns = matched(changes, [190, -190, 190, -190, 190, 380])
    up, down = np.var([90.1, 90.5, 91.3], ddof=1), np.var([-89.0, -90.0], ddof=1)
    found = pooled_scatter_deg(turns)
    assert found is not None
    assert_allclose(found[0], math.sqrt((2 * up + 1 * down) / 3), rtol=1e-12)
    assert found[1] == 3


def test_no_repeats_no_scatter():
    turns = matched([90.1, -181.25], [190, -380])
    assert pooled_scatter_deg(turns) is None
    assert pooled_scatter_deg([replace(turn, commanded_wheel_deg=math.nan) for turn in turns]) is None
