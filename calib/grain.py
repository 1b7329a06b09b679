"""Grain: a floor that lets the robot turn more easily along one axis than across it.

The gain at heading h is then ``gain * (1 + amplitude * cos 2(h - axis))``; over a turn from heading a to heading b this
integrates to an extra ``amplitude * sin(b - a) * cos(a + b - 2 axis)`` radians, the same for both directions, and to
nothing over half a revolution.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike, NDArray

from calib.about_fit import AboutFit
from calib.errors import NotIdentified
from calib.intervals import Estimate
from calib.polar import direction_deg, length_of
from calib.terms import AddedTerms, NotVaried, added_terms

FloatArray = NDArray[np.float64]

BLIND = 0.1
"""Turns this close to a multiple of 180 degrees, in radians, feel no grain."""


@dataclass(frozen=True, kw_only=True, slots=True)
class FrameGrain:
    """The grain in one floor frame.

    Parameters
    ----------
    frame : str
    amplitude : Estimate
        Relative: 0.01 for a gain that is one per cent higher along the axis and one per cent lower across it.
    axis_deg : Estimate
        Heading, from 0 to 180, along which the robot turns furthest.
    largest_deg : float
        Most heading that it adds to or takes from a turn among those driven.
    """

    frame: str
    amplitude: Estimate
    axis_deg: Estimate
    largest_deg: float


@dataclass(frozen=True, eq=False, kw_only=True, slots=True)
class Grain:
    """Dependence on the heading, in each floor frame, and the test that there is none in any."""

    frames: tuple[FrameGrain, ...]
    test: AddedTerms


def grain_columns(start_deg: ArrayLike, change_deg: ArrayLike) -> FloatArray:
    """Return what a grain of amplitude 1 and axis 0, and one of axis 45, add to each heading change in deg.

    Parameters
    ----------
    start_deg, change_deg : array_like, shape (N,)
        Heading before the turn, and signed heading change.

    Returns
    -------
    ndarray, shape (N, 2)
    """
    change = np.radians(np.asarray(change_deg, dtype=float))
    both = 2.0 * np.radians(np.asarray(start_deg, dtype=float)) + change
    return np.asarray(np.degrees(np.sin(change)[:, None] * np.column_stack([np.cos(both), np.sin(both)])))


def find_grain(about: AboutFit, *, confidence: float = 0.95) -> Grain:
    """Return the dependence of heading changes on the heading.

    Raises
    ------
    calib.errors.CalibError
        If the turns cannot tell.
    """
    table = about.table
    if not np.all(np.isfinite(table.start_heading_deg)):
        raise NotIdentified("the start headings are not known")
    change = about.expected_deg * table.turns.side
    if np.all(np.abs(np.sin(np.radians(change))) < BLIND):
        raise NotIdentified("all turns are close to half or whole revolutions, over which a grain adds up to nothing")
    columns = grain_columns(table.start_heading_deg, change) * table.turns.side[:, None]
    frames, extra = in_frames(columns, table.frame)
    try:
        test = added_terms(about.base, extra, about.along_deg, about.weight)
    except NotVaried:
        raise NotIdentified("the start headings were not varied enough; start some turns at other headings") from None
    return Grain(
        frames=tuple(
            _in_frame(frame, columns[np.array(table.frame) == frame], test, slice(2 * k, 2 * k + 2), confidence)
            for k, frame in enumerate(frames)
        ),
        test=test,
    )


def in_frames(columns: FloatArray, frame: Sequence[str]) -> tuple[tuple[str, ...], FloatArray]:
    """Return the frames there are, and the columns laid out for each of them beside each other."""
    names = tuple(dict.fromkeys(frame))
    member = np.array(frame)
    return names, np.hstack([np.where((member == name)[:, None], columns, 0.0) for name in names])


def _in_frame(frame: str, columns: FloatArray, test: AddedTerms, part: slice, confidence: float) -> FrameGrain:
    pair, cov = test.coefficients[part], test.cov[part, part]
    double = direction_deg(pair, cov, test.dof_left, confidence)
    shift = 180.0 * math.floor(0.5 * double.value / 180.0)
    return FrameGrain(
        frame=frame,
        amplitude=length_of(pair, cov, test.dof_left, confidence),
        axis_deg=Estimate(
            value=0.5 * double.value - shift,
            u=0.5 * double.u,
            low=0.5 * double.low - shift,
            high=0.5 * double.high - shift,
            confidence=confidence,
        ),
        largest_deg=float(np.abs(columns @ pair).max()),
    )
