"""The result of a clip, put together: track in the floor frame, turns, events, plane, budget and warnings."""

from __future__ import annotations

from dataclasses import asdict, replace

import numpy as np

from vision.budget import budget_of, combined_of
from vision.bundle import Calibration
from vision.card_check import CardCheck, check_cards
from vision.cross_check import CrossCheck, cross_check
from vision.observations import CornerTrack
from vision.plane import AFT_RAD, AFT_SIZE, BASE, FORE_RAD, LENS, LIFT, SHAPE
from vision.poses import solve_poses
from vision.records import ClipInfo, ClipResult, Contribution, Event, FloatArray, MarkerSetup, PoseTrack, Turn
from vision.redraw import FloorFrame, redraw_record
from vision.self_check import SelfCheck
from vision.shutter import LineDelay
from vision.steady import CameraPath, warp_px
from vision.turns import LONGEST_REST_S, Seen, Split
from vision.views import View

OUT_OF_SQUARE = 0.02
"""A card whose corners miss a square by more than this share of its side is curled or lies uneven."""

ILL_FITTING_PX = 0.35
"""Corners that miss the rigid pair by more than this show that something was not rigid, not flat or not still."""

WARPED_PX = 0.12
"""Cards that miss one common view by more than this are seen through a picture that is warped from frame to frame."""

LITTLE_TURNED_DEG = 80.0
"""With less rotation in the clip the plane is weakly known, and the result says so."""


def assemble(
    info: ClipInfo,
    setup: MarkerSetup,
    corners: CornerTrack,
    calibration: Calibration,
    seen: Seen,
    split: Split,
    path: CameraPath,
    problems: tuple[str, ...],
    delay: LineDelay,
    views: tuple[View, ...],
    cov: FloatArray,
    check: SelfCheck | None,
) -> ClipResult:
    """Return the result of one clip in the floor frame."""
    cards = check_cards(list(corners.looks), calibration)
    frame = _floor_frame(cards)
    warp = warp_px(corners, path, calibration.p[LENS])
    events = (*(event for event in split.events if not _view_lost(event, path)), *_moved(path))
    turns = tuple(_placed(_touched(turn, path, warp, views), frame) for turn in split.turns)
    alone = check_cards(list(corners.looks), calibration.alone) if calibration.alone is not None else cards
    crossed = cross_check(corners, calibration, seen, split.rests) if not views else None
    turns = tuple(_flag_edges(turn, corners) for turn in turns)
    budget = budget_of(seen, split, calibration, cov, camera_still=not path.held)
    return ClipResult(
        clip=info,
        track=_pose_track(corners, seen, split, frame),
        turns=turns,
        events=tuple(sorted(events, key=lambda event: event.start_s)),
        plane={
            **_plane_record(corners, calibration, cards, setup),
            "line_delay": _delay_record(delay, corners),
            "cards_and_rotation": _agreement(corners, calibration, seen),
            "cross_check": asdict(crossed) if crossed is not None else None,
            "self_check": asdict(check) if check is not None else None,
            "typical_turn": asdict(combined_of(budget)) if budget else None,
            "heading_changes": [_expanded_record(turn) for turn in turns],
            "redraw": redraw_record(calibration.p, calibration.units, frame),
        },
        budget=budget,
        warnings=(
            *problems,
            *_warnings(calibration, alone, path, warp, views),
            *_unlike(check, budget),
            *_crossed(crossed, budget),
        ),
    )


def _floor_frame(cards: list[CardCheck]) -> FloorFrame:
    """Return the frame of the card with the lowest id, or the picture's own where there is none."""
    if not cards:
        return 0.0, 0.0, 0.0
    first = cards[0]
    return float(-np.degrees(first.turn_rad)), float(first.centre_mm[0]), float(-first.centre_mm[1])


def _place(x_mm: FloatArray, y_mm: FloatArray, frame: FloorFrame) -> tuple[FloatArray, FloatArray]:
    c, s = np.cos(np.deg2rad(frame[0])), np.sin(np.deg2rad(frame[0]))
    dx, dy = x_mm - frame[1], y_mm - frame[2]
    return c * dx + s * dy, c * dy - s * dx


def _placed(turn: Turn, frame: FloorFrame) -> Turn:
    x, y = _place(np.array(turn.centre_x_mm), np.array(turn.centre_y_mm), frame)
    return replace(
        turn,
        start_heading_deg=turn.start_heading_deg - frame[0],
        end_heading_deg=turn.end_heading_deg - frame[0],
        centre_x_mm=float(x),
        centre_y_mm=float(y),
    )


def _touched(turn: Turn, path: CameraPath, warp: float, views: tuple[View, ...]) -> Turn:
    """Flag a turn in a warped picture, or one during which a camera that otherwise stands was knocked."""
    if warp > WARPED_PX:
        return replace(turn, flags=(*turn.flags, "warped"))
    if path.still or (path.held and _held_by_hand(path)):
        return turn
    own = [path.best, *((view.start_s, view.end_s) for view in views)]
    if path.loose and not any(_within(turn, still) for still in own):
        return replace(turn, flags=(*turn.flags, "camera_moved"))
    hit = any(start_s <= turn.end_s and end_s >= turn.start_s for start_s, end_s in path.spans)
    return replace(turn, flags=(*turn.flags, "camera_moved")) if hit else turn


def _within(turn: Turn, still: tuple[float, float] | None) -> bool:
    return still is not None and turn.start_s >= still[0] and turn.end_s <= still[1]


def _view_lost(event: Event, path: CameraPath) -> bool:
    """Return whether a stretch without sight is only one without a steady view, which is told as such."""
    spans = path.spans if path.held else ()
    return event.kind == "hidden" and any(
        event.start_s > start_s - 0.1 and event.end_s < end_s + 0.1 for start_s, end_s in spans
    )


def _held_by_hand(path: CameraPath) -> bool:
    """Return whether the camera moved most of the time."""
    if not path.spans:
        return False
    moved_s = sum(end_s - start_s for start_s, end_s in path.spans)
    return moved_s > 0.5 * (path.spans[-1][1] - min(path.spans[0][0], 0.0))


def _moved(path: CameraPath) -> list[Event]:
    if path.still:
        return []
    detail = f"the floor cards shifted by up to {path.shift_px:.1f} px; {path.n_cards} cards hold the view steady"
    if path.loose:
        detail = f"the floor shifted by up to {path.shift_px:.1f} px; no card holds the view steady"
    return [Event(start_s=start_s, end_s=end_s, kind="camera moved", detail=detail) for start_s, end_s in path.spans]


def _pose_track(corners: CornerTrack, seen: Seen, split: Split, frame: FloorFrame) -> PoseTrack:
    n_frames = len(corners.time_s)

    def spread(values: FloatArray) -> FloatArray:
        out = np.full(n_frames, np.nan)
        out[seen.index] = values
        return out

    x_mm, y_mm = _place(seen.x_mm, seen.y_mm, frame)
    states = np.full(n_frames, "hidden", dtype="<U7")
    states[seen.index] = split.states
    return PoseTrack(
        time_s=corners.time_s,
        heading_deg=spread(seen.heading_deg - frame[0]),
        u_heading_deg=spread(seen.u_heading_deg),
        x_mm=spread(x_mm),
        y_mm=spread(y_mm),
        scale=spread(seen.scale),
        residual_px=spread(seen.residual_px),
        state=tuple(str(state) for state in states),
    )


def _plane_record(
    corners: CornerTrack, calibration: Calibration, cards: list[CardCheck], setup: MarkerSetup
) -> dict[str, object]:
    p, units = calibration.p, calibration.units
    u = np.sqrt(np.diag(calibration.cov))
    return {
        "method": f"rotation of the robot's two markers{', and floor cards' * (calibration.alone is not None)}",
        "frames_used": calibration.n_frames,
        "turned_deg": float(np.degrees(calibration.turned_rad)),
        "misfit": calibration.misfit,
        "residual_px": calibration.residual_px,
        "plane_map": {"values": p[SHAPE].tolist(), "u": u[SHAPE].tolist(), "length_mm": units.length_mm,
                      "half_diagonal_px": units.half_px},
        "lens": {"k1": float(p[LENS][0]), "u_k1": float(u[LENS][0]), "k2": float(p[LENS][1]),
                 "u_k2": float(u[LENS][1]), "radius_unit": "half the picture's diagonal"},
        "mounting": {
            "marker_distance_mm": float(p[BASE] * units.length_mm),
            "u_marker_distance_mm": float(u[BASE] * units.length_mm),
            "fore_marker_deg": float(-np.degrees(p[FORE_RAD])),
            "aft_marker_deg": float(-np.degrees(p[AFT_RAD])),
            "aft_marker_size": float(p[AFT_SIZE]),
            "u_aft_marker_size": float(u[AFT_SIZE]),
            "aft_marker_lift_mm": [float(v * units.length_mm) for v in p[LIFT]],
            "u_aft_marker_lift_mm": [float(v * units.length_mm) for v in u[LIFT]],
        },
        "picture": {"blur_px": corners.optics.blur_px, "tone": corners.optics.tone, "halo": corners.optics.halo,
                    "halo_px": corners.optics.halo_px, "exposure_s": corners.exposure_s},
        "cards": [_card_record(card, setup) for card in cards],
    }  # fmt: skip


def _expanded_record(turn: Turn) -> dict[str, object]:
    """Return the expanded uncertainty of one turn, in the order of ``turns.csv``."""
    known = np.isfinite(turn.expanded_deg) and turn.u_heading_change_deg > 0.0
    return {
        "start_s": turn.start_s,
        "u_deg": turn.u_heading_change_deg,
        "effective_degrees_of_freedom": turn.degrees_of_freedom if known else None,
        "coverage_factor": turn.expanded_deg / turn.u_heading_change_deg if known else None,
        "expanded_95_deg": turn.expanded_deg if known else None,
    }


def _delay_record(delay: LineDelay, corners: CornerTrack) -> dict[str, object]:
    """Return what is known of the rolling shutter; it touches the moving frames alone."""
    known = delay.n_motions > 0 and np.isfinite(delay.u_s)
    return {
        "us": 1e6 * delay.delay_s,
        "u_us": 1e6 * delay.u_s if known else None,
        "how": delay.how,
        "motions": delay.n_motions,
        "frame_read_ms": 1e3 * abs(delay.delay_s) * corners.image_px[1],
    }


def _card_record(card: CardCheck, setup: MarkerSetup) -> dict[str, object]:
    record: dict[str, object] = {
        "id": card.card_id,
        "apparent_side_mm": card.side_mm,
        "out_of_square_mm": card.out_of_square_mm,
        "spread_px": card.spread_px,
    }
    if setup.card_side_mm:
        record["floor_to_deck_scale"] = card.side_mm / setup.card_side_mm
    return record


def _warnings(
    calibration: Calibration, cards: list[CardCheck], path: CameraPath, warp: float, views: tuple[View, ...]
) -> list[str]:
    said: list[str] = []
    turned_deg = float(np.degrees(calibration.turned_rad))
    if turned_deg < LITTLE_TURNED_DEG:
        said.append(
            f"the robot's headings cover only {turned_deg:.0f} deg, so the floor plane is weakly known; let it turn "
            "through 90 deg or more in the clip"
        )
    if calibration.residual_px > ILL_FITTING_PX:
        said.append(
            f"the markers' corners miss a rigid pair on one plane by {calibration.residual_px:.2f} px: the camera "
            "moved (floor cards in view would hold it steady), a marker is loose, or the deck rocks"
        )
    said.extend(_uneven(cards, calibration) if path.still else [])
    said.extend(
        f"card {number} did not stay with the others and was left out; was it moved, or is it curled?"
        for number in path.strays
    )
    if warp > WARPED_PX:
        said.append(
            f"the picture is warped from frame to frame, as digital stabilisation does: the floor cards miss a common "
            f"view by {warp:.2f} px; turns are as uncertain as u_heading_change_deg says; film with stabilisation off"
        )
    said.extend(_loose(path, views))
    if path.held and path.n_cards < 2:
        said.append("the camera moved and only one floor card holds the view; lay out three or more")
    if path.held and _held_by_hand(path):
        said.append(f"the camera was not still; {path.n_cards} floor cards held the view steady")
    elif path.held:
        said.extend(
            f"the camera moved between {start_s:.1f} s and {end_s:.1f} s; before and after have maps of their own"
            for start_s, end_s in path.spans
        )
    return said


def _flag_edges(turn: Turn, corners: CornerTrack) -> Turn:
    """Flag a turn at whose rests the edges had to stand in for the alignment."""
    first_s, last_s = turn.start_s - LONGEST_REST_S, turn.end_s + LONGEST_REST_S
    if any(look.alone and first_s <= look.time_s <= last_s for look in corners.edge_looks):
        return replace(turn, flags=(*turn.flags, "edges"))
    return turn


def _agreement(corners: CornerTrack, calibration: Calibration, seen: Seen) -> dict[str, object] | None:
    """Return by how much headings and places differ between the plane with the cards and that without; None without."""
    if calibration.alone is None:
        return None
    poses = solve_poses(corners, calibration.alone)
    turned = np.unwrap(poses.heading_rad[seen.index]) - np.deg2rad(seen.heading_deg)
    apart = np.column_stack([poses.x_mm[seen.index] - seen.x_mm, poses.y_mm[seen.index] - seen.y_mm])
    away = apart - np.nanmedian(apart, axis=0)
    return {
        "heading_change_deg": float(np.degrees(np.nanmax(turned) - np.nanmin(turned))),
        "place_mm": float(np.nanmax(np.hypot(away[:, 0], away[:, 1]))),
        "cards_left_out": list(calibration.left_out),
    }


def _crossed(check: CrossCheck | None, budget: tuple[Contribution, ...]) -> list[str]:
    if check is None or check.agree or not budget:
        return []
    if check.largest_deg < combined_of(budget).expanded:
        return []
    return [
        f"heading changes from the markers' edges differ from those from their patterns by {check.mean_deg:+.3f} deg "
        f"on the mean and by {1e3 * check.gain_share:+.2f} parts in a thousand of their size (largest "
        f"{check.largest_deg:.3f} deg): something lies on a marker, or its print is not flat"
    ]


def _unlike(check: SelfCheck | None, budget: tuple[Contribution, ...]) -> list[str]:
    """Return what is to be said where the pair changes with the heading by more than the budget allows."""
    if check is None or not check.beyond_chance or not budget:
        return []
    expanded_deg = combined_of(budget).expanded
    if check.bound_deg <= expanded_deg:
        return []
    return [
        f"the markers' distance goes up and down with the heading: a heading change may be off by up to "
        f"{check.bound_deg:.3f} deg, more than the +/- {expanded_deg:.3f} deg of the uncertainty budget; are both "
        "markers flat and firm, and does the deck stay level?"
    ]


def _uneven(cards: list[CardCheck], calibration: Calibration) -> list[str]:
    """Return what is to be said about cards that are not square: one accuses itself, most the robot's markers."""
    out = [card for card in cards if card.card_id in calibration.left_out]
    said = [
        f"card {card.card_id} is not a flat square on the floor ({card.out_of_square_mm:.1f} mm off) and was left out; "
        "is it curled, or not lying on the floor?"
        for card in out
    ]
    off = [card for card in cards if card.out_of_square_mm > OUT_OF_SQUARE * card.side_mm and card not in out]
    if len(off) > 1 and 2 * len(off) > len(cards):
        worst_mm = max(card.out_of_square_mm for card in off)
        said.append(
            f"{len(off)} of {len(cards)} floor cards do not look square on the plane that the robot's markers alone "
            f"give (by up to {worst_mm:.1f} mm): a robot marker is creased, curled or loose; stick both on stiff card"
        )
    return said


def _loose(path: CameraPath, views: tuple[View, ...]) -> list[str]:
    """Return what is to be said about a camera without floor cards."""
    if not path.checked:
        return [
            "neither floor cards nor marks on the floor show whether the camera stood still; lay out three floor cards"
        ]
    if not path.loose:
        return []
    cure = "fix the phone, or lay out three floor cards or more"
    if path.best is None:
        return [f"the camera never stood still and no floor card holds the view, so that no turn counts; {cure}"]
    own = sorted([path.best, *((view.start_s, view.end_s) for view in views)])
    when = " or ".join(f"between {start_s:.1f} s and {end_s:.1f} s" for start_s, end_s in own)
    maps = "each stretch has a map of its own, and " if views else ""
    return [
        f"the camera moved ({_listed_spans(path)}) and no floor card holds the view: {maps}only turns {when} count; "
        f"{cure}"
    ]


def _listed_spans(path: CameraPath) -> str:
    shown = [f"{start_s:.1f} to {end_s:.1f} s" for start_s, end_s in path.spans[:3]]
    more = len(path.spans) - len(shown)
    return ", ".join(shown) + (f" and {more} times more" if more else "")
