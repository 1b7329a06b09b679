"""What to change before filming, each piece of advice with what it would gain, the largest gain first."""

from __future__ import annotations

import math
from collections.abc import Callable, Iterator
from dataclasses import dataclass, replace

import numpy as np

from vision.foresight import Plan, Prospect, foresee, free_of_coding, with_sharper_corners
from vision.glimpse import Glimpse, base_sides, least_code_distance, swept_out_px, tilt_deg
from vision.plane import BASE

SMALL_SIDE_PX, GOOD_SIDE_PX = 40.0, 60.0
NOISY_SHARE, QUIET_SHARE = 0.05, 0.02
"""Noise of the picture against the contrast of a marker: poor, and good."""
PALE_GREY, GOOD_GREY = 80.0, 150.0
BLURRED_PX, SHARP_PX = 1.7, 0.9
POOR_BITS, GOOD_BITS = 0.04, 0.2
"""Bits that a clip spends on a pixel of a frame: poor (2.5 Mbit/s at 1080p and 30 frames/s), and good."""
STEEP_DEG = 30.0
FLICKERING = 0.012
FULL_SHARE = 0.2
SMEARED_SIDES = 0.25
SLOW_FILM_HZ = 23.0
NEAR_SIDES, FAR_SIDES = 1.6, 2.5
ALIKE_BITS = 4
WORTH_SAYING = 0.95
"""A cure is said to gain something only where it lowers the uncertainty to less than this share."""


@dataclass(frozen=True, kw_only=True, slots=True)
class Advice:
    """One thing to change.

    Parameters
    ----------
    kind : str
        A word for it.
    text : str
        What was found, and what to do.
    after_deg : float or None
        Expanded uncertainty (about 95 %) to expect of a turn once it is done; None where it gains something else.
    """

    kind: str
    text: str
    after_deg: float | None = None


@dataclass(frozen=True, eq=False, kw_only=True, slots=True)
class Sight:
    """All that advice is given from; `bits` (a pixel and frame) and `rate_hz` are NaN for a still."""

    glimpse: Glimpse
    prospect: Prospect
    plan: Plan
    bits: float
    rate_hz: float
    dictionary: str
    marker_ids: tuple[int, int]


def advice_for(sight: Sight, expanded_deg: float) -> list[Advice]:
    """Return what to change, what gains most first; what has no figure comes before, since it can spoil everything."""
    said = [
        *_in_view(sight),
        *_camera(sight, expanded_deg),
        *_light(sight, expanded_deg),
        *_geometry(sight, expanded_deg),
    ]
    return sorted(said, key=lambda item: -1.0 if item.after_deg is None else item.after_deg)


def _cured(sight: Sight, cure: Callable[[Prospect], Prospect], expanded_deg: float) -> float | None:
    """Return the expanded uncertainty after a cure; None where that is no gain worth a figure."""
    after_deg = foresee(cure(sight.prospect), sight.plan).expanded_deg
    return after_deg if after_deg < WORTH_SAYING * expanded_deg else None


def _sharper(factor: float) -> Callable[[Prospect], Prospect]:
    return lambda prospect: with_sharper_corners(prospect, factor)


def _in_view(sight: Sight) -> Iterator[Advice]:
    glimpse = sight.glimpse
    for number in glimpse.twice_ids:
        yield Advice(kind="twice", text=f"marker {number} is in view more than once: take the second one away")
    alike = least_code_distance(sight.dictionary, (*sight.marker_ids, *glimpse.card_ids))
    if alike is not None and alike[2] < ALIKE_BITS:
        yield Advice(
            kind="alike",
            text=f"the codes {alike[0]} and {alike[1]} differ in {alike[2]} modules only: use other ids, or a "
            "dictionary with more modules",
        )
    if glimpse.stranger_ids:
        names = ", ".join(map(str, glimpse.stranger_ids[:4]))
        yield Advice(kind="strangers", text=f"other codes are in view ({names}): cover them, or take them away")
    if not glimpse.card_ids and not glimpse.camera.checked and glimpse.n_frames > 1:
        yield Advice(
            kind="cards",
            text="neither floor cards nor marks on the floor would show a knock of the camera: lay out three cards",
        )


def _camera(sight: Sight, expanded_deg: float) -> Iterator[Advice]:
    glimpse, prospect = sight.glimpse, sight.prospect
    if glimpse.camera.loose:
        yield Advice(
            kind="unsteady",
            text="the camera moves and no floor card holds the view: lean or clamp the phone, or lay out three cards",
        )
    elif glimpse.camera.held:
        yield Advice(
            kind="unsteady",
            text=f"the camera moves (by up to {glimpse.camera.shift_px:.1f} px): lean or clamp the phone",
            after_deg=_cured(sight, _held_firmly, expanded_deg),
        )
    if sight.rate_hz < SLOW_FILM_HZ:
        yield Advice(
            kind="frame rate",
            text=f"{sight.rate_hz:.0f} frames/s lose a quick turn: film at 30 frames/s or more",
        )
    if sight.bits < POOR_BITS:
        yield Advice(
            kind="bit rate",
            text=f"the clip spends {sight.bits:.3f} bits on a pixel, so that coding hides the edges: choose the "
            "highest quality that the camera offers, and do not send the clip through a messenger",
            after_deg=_cured(sight, free_of_coding, expanded_deg),
        )
    smear_px = np.deg2rad(sight.plan.rate_deg_s) * _reach_px(prospect) * prospect.exposure_s
    if smear_px > SMEARED_SIDES * prospect.side_px:
        known = "" if glimpse.track.exposure_s else " (exposure taken as a quarter of the frame interval)"
        yield Advice(
            kind="shutter",
            text=f"at {sight.plan.rate_deg_s:.0f} deg/s the markers smear by {smear_px:.0f} px{known}: more light, a "
            "shorter exposure, or slower turns",
        )


def _reach_px(prospect: Prospect) -> float:
    """Return the distance of a marker's middle from the middle of the pair, in the picture."""
    return 0.5 * base_sides(prospect.p, prospect.units) * prospect.side_px


def _light(sight: Sight, expanded_deg: float) -> Iterator[Advice]:
    glimpse = sight.glimpse
    contrast = min((look.contrast_grey for look in glimpse.markers), default=math.nan)
    noise = max((look.noise_grey / max(look.contrast_grey, 1.0) for look in glimpse.markers), default=math.nan)
    if contrast < PALE_GREY:
        yield Advice(
            kind="contrast",
            text=f"black and white of a marker differ by {contrast:.0f} grey values only: more light, no glare, a "
            "fresh print",
            after_deg=_cured(sight, _sharper(GOOD_GREY / max(contrast, 10.0)), expanded_deg),
        )
    if noise > NOISY_SHARE:
        yield Advice(
            kind="noise",
            text=f"noise, dirt or a shadow is {100.0 * noise:.0f} % of a marker's contrast: more and more even light",
            after_deg=_cured(sight, _sharper(noise / QUIET_SHARE), expanded_deg),
        )
    if any(look.full_share > FULL_SHARE for look in glimpse.markers):
        yield Advice(
            kind="too bright",
            text="the paper is as white as the picture can show, which shifts its edges: lower the exposure a little",
        )
    if glimpse.flicker > FLICKERING:
        yield Advice(
            kind="flicker",
            text=f"the light flickers by {100.0 * glimpse.flicker:.1f} % from frame to frame: other lamps, daylight, "
            "or an exposure of a whole mains period",
        )
    blur_px = sight.prospect.optics.blur_px
    if blur_px > BLURRED_PX:
        yield Advice(
            kind="focus",
            text=f"edges are {blur_px:.1f} px wide (standard deviation): clean the lens, tap to focus, keep the focus "
            "locked",
            after_deg=_cured(sight, _sharper(math.sqrt(blur_px / SHARP_PX)), expanded_deg),
        )


def _geometry(sight: Sight, expanded_deg: float) -> Iterator[Advice]:
    prospect = sight.prospect
    if prospect.side_px < SMALL_SIDE_PX:
        factor = (GOOD_SIDE_PX / prospect.side_px) ** 1.5  # edges are longer, and a pixel is less of the robot
        yield Advice(
            kind="closer",
            text=f"the markers are {prospect.side_px:.0f} px wide: come nearer, or print them larger, to "
            f"{GOOD_SIDE_PX:.0f} px",
            after_deg=_cured(sight, _sharper(factor), expanded_deg),
        )
    tilt = tilt_deg(prospect.p, prospect.units, prospect.pose)
    if tilt > STEEP_DEG:
        yield Advice(
            kind="tilt",
            text=f"the camera looks at the deck {tilt:.0f} deg from straight down: bring it over the robot",
            after_deg=_cured(sight, _sharper(1.0 / math.cos(np.deg2rad(min(tilt, 75.0)))), expanded_deg),
        )
    if base_sides(prospect.p, prospect.units) < NEAR_SIDES:
        yield Advice(
            kind="apart",
            text=f"the markers' middles are only {base_sides(prospect.p, prospect.units):.1f} marker sides apart: "
            "mount them farther apart",
            after_deg=_cured(sight, _farther_apart, expanded_deg),
        )
    out_px = swept_out_px(prospect.p, prospect.units, prospect.pose, prospect.image_px)
    if out_px > 0.0:
        yield Advice(
            kind="edge",
            text=f"turning on the spot a marker leaves the picture by up to {out_px:.0f} px: bring the robot to the "
            "middle",
        )


def _held_firmly(prospect: Prospect) -> Prospect:
    return replace(prospect, view_fresh_deg=0.0, view_deg=0.0, fresh=min(prospect.fresh, 2.0))


def _farther_apart(prospect: Prospect) -> Prospect:
    p = prospect.p.copy()
    p[BASE] *= FAR_SIDES / base_sides(p, prospect.units)
    return replace(prospect, p=p)
