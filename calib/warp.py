"""Place on the floor: whether the gain rises or falls across it, along a slope or over a bump."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from calib.about_fit import AboutFit
from calib.errors import CalibError, NotIdentified
from calib.grain import in_frames
from calib.intervals import Estimate
from calib.polar import direction_deg, length_of
from calib.terms import AddedTerms, NotVaried, added_terms

FloatArray = NDArray[np.float64]

LEAST_SPAN_MM = 50.0
"""Places that all lie within this of each other are one place."""


@dataclass(frozen=True, kw_only=True, slots=True)
class FrameWarp:
    """How the gain changes with the place in one floor frame.

    Parameters
    ----------
    frame : str
    slope_per_m : Estimate
        Relative change of the gain over a metre, in the direction in which it rises most.
    uphill_deg : Estimate
        That direction.
    largest_deg : float
        Most heading that the slope adds to or takes from a turn among those driven, against their middle.
    span_mm : tuple of float
        How far the places reach in x and y.
    """

    frame: str
    slope_per_m: Estimate
    uphill_deg: Estimate
    largest_deg: float
    span_mm: tuple[float, float]


@dataclass(frozen=True, eq=False, kw_only=True, slots=True)
class Warp:
    """Dependence on the place.

    Parameters
    ----------
    frames : tuple of FrameWarp
    slope : AddedTerms
        Terms linear in x and y, against none.
    curve : AddedTerms or None
        Terms quadratic in them, against the linear ones; None where the turns cannot tell.
    why_no_curve : str
        The reason, empty if there is none.
    """

    frames: tuple[FrameWarp, ...]
    slope: AddedTerms
    curve: AddedTerms | None
    why_no_curve: str


def find_warp(about: AboutFit, *, confidence: float = 0.95) -> Warp:
    """Return the dependence of heading changes on the place.

    Raises
    ------
    calib.errors.CalibError
        If the turns cannot tell.
    """
    table = about.table
    if not np.all(np.isfinite(table.x_mm) & np.isfinite(table.y_mm)):
        raise NotIdentified("the places of the turns are not known")
    where = _from_middle(np.column_stack([table.x_mm, table.y_mm]), table.frame)
    spans = {name: np.ptp(where[np.array(table.frame) == name], axis=0) for name in dict.fromkeys(table.frame)}
    if not max(float(np.hypot(*span)) for span in spans.values()) >= LEAST_SPAN_MM:
        raise NotIdentified(f"all turns were made within {LEAST_SPAN_MM:g} mm of one place")
    metres = where / 1000.0 * about.expected_deg[:, None]
    frames, linear = in_frames(metres, table.frame)
    member = np.array(table.frame)
    try:
        slope = added_terms(about.base, linear, about.along_deg, about.weight)
    except NotVaried:
        raise NotIdentified("the places lie on one line, or change together with the commands") from None
    curve, why = _curve(about, where, linear)
    return Warp(
        frames=tuple(
            _in_frame(name, metres[member == name], slope, slice(2 * k, 2 * k + 2), spans[name], confidence)
            for k, name in enumerate(frames)
        ),
        slope=slope,
        curve=curve,
        why_no_curve=why,
    )


def _from_middle(where: FloatArray, frame: tuple[str, ...]) -> FloatArray:
    out, member = where.copy(), np.array(frame)
    for name in dict.fromkeys(frame):
        out[member == name] -= out[member == name].mean(axis=0)
    return out


def _curve(about: AboutFit, where: FloatArray, linear: FloatArray) -> tuple[AddedTerms | None, str]:
    x, y = (where / max(float(np.abs(where).max()), 1e-9)).T
    _, squares = in_frames(np.column_stack([x**2, x * y, y**2]) * about.expected_deg[:, None], about.table.frame)
    try:
        return added_terms(np.hstack([about.base, linear]), squares, about.along_deg, about.weight), ""
    except CalibError as error:
        return None, str(error)


def _in_frame(
    name: str, columns: FloatArray, slope: AddedTerms, part: slice, span: FloatArray, confidence: float
) -> FrameWarp:
    pair, cov = slope.coefficients[part], slope.cov[part, part]
    return FrameWarp(
        frame=name,
        slope_per_m=length_of(pair, cov, slope.dof_left, confidence),
        uphill_deg=direction_deg(pair, cov, slope.dof_left, confidence),
        largest_deg=float(np.abs(columns @ pair).max()),
        span_mm=(float(span[0]), float(span[1])),
    )
