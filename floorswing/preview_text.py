"""A preview in words and figures."""

from __future__ import annotations

import math
from typing import Any

from floorswing.files import plain
from floorswing.previewing import SURE, Preview
from vision.glimpse import base_sides, distance_sides, tilt_deg

VERDICTS = {
    "will do": "this will do",
    "will not do": "this will not do",
    "close": "this is a close call",
}


def lines(found: Preview) -> list[str]:
    """Return what is printed, line by line."""
    said = _figures(found) if found.glimpse is not None else [f"Robot not found: {found.complaint}."]
    said += ["", *_expected(found)]
    if found.advice:
        said += ["", "What to change, most gain first:" if len(found.advice) > 1 else "What to change:"]
        for number, item in enumerate(found.advice, 1):
            said.append(f"  {number}. {item.text}{_gain(item.after_deg)}")
    elif found.glimpse is not None:
        said += ["", "Nothing needs changing."]
    return said


def _gain(after_deg: float | None) -> str:
    return f" (then +/- {_shown(after_deg)} deg)" if after_deg is not None else ""


def _figures(found: Preview) -> list[str]:
    glimpse, prospect = found.glimpse, found.prospect
    assert glimpse is not None
    assert prospect is not None
    width, height = prospect.image_px
    head = f"{found.path.name}: {width} x {height} px"
    if found.is_still:
        head += ", a photo"
        head += f" looked at {found.reduced:.2f} times its size, as a clip would show it" * (found.reduced < 1.0)
    else:
        head += f", {found.rate_hz:.1f} frames/s, {found.bits:.3f} bits a pixel, {_keys(found.key_s)}"
    said = [head, "", f"{'marker':<8}{'side px':>9}{'black':>7}{'white':>7}{'noise':>7}{'fit %':>7}"]
    for look in glimpse.markers:
        said.append(
            f"{look.marker_id:<8}{look.side_px:>9.1f}{look.black_grey:>7.0f}{look.white_grey:>7.0f}"
            f"{look.noise_grey:>7.1f}{100.0 * look.explained:>7.1f}"
        )
    cards = ", ".join(map(str, glimpse.card_ids)) if glimpse.card_ids else "none"
    said += [
        "",
        f"Floor cards in view: {cards}.",
        f"Edges {prospect.optics.blur_px:.2f} px wide; the markers' middles "
        f"{base_sides(prospect.p, prospect.units):.1f} sides apart.",
        f"Camera about {distance_sides(prospect.side_px, prospect.image_px):.0f} marker sides away, "
        f"{tilt_deg(prospect.p, prospect.units, prospect.pose):.0f} deg from straight above (for a usual phone lens).",
        _moving(found),
    ]
    return said


def _keys(key_s: float) -> str:
    return f"a key frame every {key_s:.2g} s" if math.isfinite(key_s) else "one key frame"


def _moving(found: Preview) -> str:
    glimpse, prospect = found.glimpse, found.prospect
    assert glimpse is not None
    assert prospect is not None
    if found.is_still:
        return "A photo cannot show noise that coding repeats, flicker, or whether the camera stands still."
    camera = glimpse.camera
    state = (
        "stands still" if camera.still and camera.checked
        else "may stand still (nothing on the floor shows it)" if camera.still
        else f"moves by up to {camera.shift_px:.1f} px"
    )  # fmt: skip
    exposure = (
        f"exposure {1e3 * glimpse.track.exposure_s:.0f} ms"
        if glimpse.track.exposure_s
        else f"exposure taken as {1e3 * prospect.exposure_s:.0f} ms (nothing moved fast)"
    )
    flicker = f", light steady to {100.0 * glimpse.flicker:.1f} %" if math.isfinite(glimpse.flicker) else ""
    return f"The camera {state}; {exposure}{flicker}."


def _expected(found: Preview) -> list[str]:
    if not math.isfinite(found.u_deg):
        said = ["Turns cannot be measured like this."]
    else:
        low, high = found.expanded_deg / SURE, found.expanded_deg * SURE
        said = [
            f"Expect +/- {_shown(found.expanded_deg)} deg on a single turn (about 95 %; the clip will state "
            f"{_shown(low)} to {_shown(high)})."
        ]
    if found.want_deg is not None:
        said.append(f"Wanted +/- {found.want_deg:g} deg: {VERDICTS[found.verdict]}.")
    return said


def _shown(value_deg: float) -> str:
    return f"{value_deg:.2g}" if value_deg < 10.0 else f"{value_deg:.0f}"


def as_document(found: Preview) -> dict[str, Any]:
    """Return everything for JSON; what is not known is null."""
    glimpse, prospect = found.glimpse, found.prospect
    document: dict[str, Any] = {
        "path": found.path,
        "kind": "photo" if found.is_still else "clip",
        "reduced": found.reduced,
        "complaint": found.complaint or None,
        "rate_hz": found.rate_hz,
        "key_s": found.key_s,
        "bits_per_pixel": found.bits,
        "u_heading_change_deg": found.u_deg,
        "expanded_deg": found.expanded_deg,
        "budget": found.foresight.budget if found.foresight is not None else (),
        "want_deg": found.want_deg,
        "verdict": found.verdict or None,
        "advice": found.advice,
    }
    if glimpse is not None and prospect is not None:
        document |= {
            "markers": glimpse.markers,
            "card_ids": glimpse.card_ids,
            "stranger_ids": glimpse.stranger_ids,
            "twice_ids": glimpse.twice_ids,
            "blur_px": prospect.optics.blur_px,
            "base_sides": base_sides(prospect.p, prospect.units),
            "distance_sides": distance_sides(prospect.side_px, prospect.image_px),
            "tilt_deg": tilt_deg(prospect.p, prospect.units, prospect.pose),
            "exposure_s": prospect.exposure_s,
            "exposure_seen": bool(glimpse.track.exposure_s),
            "flicker": glimpse.flicker,
            "camera_still": glimpse.camera.still,
            "camera_checked": glimpse.camera.checked,
            "camera_shift_px": glimpse.camera.shift_px,
            "fresh": prospect.fresh,
            "frozen": prospect.frozen,
        }
    found_plain: dict[str, Any] = plain(document)
    return found_plain
