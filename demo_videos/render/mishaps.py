"""Clips as they come from phones and rooms: one builder for each thing that can be unusual.

`robustness_rows` returns them all; each can be had by name with `row`.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import replace
from pathlib import Path

import numpy as np

from demo_videos.render.motion import Lift, Missed, Push, Straight, TwoPushes, Wait
from demo_videos.render.moves import Breathing, HandHeld, Nudge, Stabiliser, Sway
from demo_videos.render.rows import (
    Row,
    board,
    hand,
    plain_camera,
    plain_cards,
    plain_drive,
    plain_motion,
    plain_scene,
    seen_at,
    spins,
)
from demo_videos.render.scene import (
    Card,
    CardShift,
    ExposureStep,
    Floor,
    Glint,
    Light,
    Mount,
    Occluder,
    Robot,
    Scene,
    Sensor,
    ShadowEdge,
    Timing,
)

QUICK: dict[str, object] = {"bitrate": 8_000_000}
Builder = Callable[[], list[Row]]


def robustness_rows() -> list[Row]:
    """Return every row, in the order of the table."""
    builders: tuple[Builder, ...] = (
        stored_ways,
        picture_sizes,
        odd_times,
        damaged_files,
        unsteady_cameras,
        changing_light,
        handled_carts,
        hidden_markers,
        commands_and_turns,
        clip_ends,
        marker_faults,
        card_faults,
        fast_spins,
    )
    return [item for builder in builders for item in builder()]


def row(name: str) -> Row:
    """Return the row of this name."""
    rows = {item.name: item for item in robustness_rows()}
    if name not in rows:
        raise ValueError(f"no row is named {name!r}; there are {', '.join(rows)}")
    return rows[name]


def plain(name: str, what: str, **changes: object) -> Row:
    """Return the plain trial with some fields of the row changed."""
    fields: dict[str, object] = {"scene": plain_scene(), "motion": plain_motion(), "storage": QUICK, **changes}
    return Row(name=name, what=what, **fields)


# --- files ---


def stored_ways() -> list[Row]:
    """Return containers, codecs, depths, ranges, orientations."""
    ten, full = Sensor(noise_grey=2.0, bits=10), Sensor(noise_grey=2.0, full_range=True)
    return [
        plain("plain", "H.264 in mp4, camera on a stand", quiet=True),
        plain("no_cards", "no floor cards", scene=plain_scene(cards=()), quiet=True),
        plain("hevc_mov", "HEVC in mov with sound", suffix=".mov", storage={"codec": "hevc", "crf": 24, "audio": True}),
        plain(
            "hevc_10bit",
            "HEVC with 10 bits",
            scene=plain_scene(sensor=ten),
            suffix=".mov",
            storage={"codec": "hevc", "crf": 24},
        ),
        plain("vp9_webm", "VP9 in webm", suffix=".webm", storage={"codec": "vp9", "bitrate": 6_000_000}),
        plain("av1_mkv", "AV1 in Matroska", suffix=".mkv", storage={"codec": "av1", "crf": 28}),
        plain("mjpeg_avi", "Motion JPEG in avi", suffix=".avi", storage={"codec": "mjpeg"}),
        plain("full_range", "full-range luma", scene=plain_scene(sensor=full)),
        plain("on_its_side", "stored sideways, rotation flag 90", storage={**QUICK, "rotation_deg": 90}),
        plain("upside_down", "stored upside down, rotation flag 180", storage={**QUICK, "rotation_deg": 180}),
        plain("other_side", "stored sideways, rotation flag 270", storage={**QUICK, "rotation_deg": 270}),
        plain("mirror_flag", "stored mirrored, with the flag that says so", storage={**QUICK, "mirrored": True}),
        plain("low_bitrate", "H.264 at 1.5 Mb/s", storage={"bitrate": 1_500_000}),
        plain("long_gop", "one key frame in ten seconds", storage={**QUICK, "gop": 300}),
    ]


def picture_sizes() -> list[Row]:
    """Return picture sizes and frame rates."""
    hd = plain_camera(width_px=1920, height_px=1080, focal_px=1575.0)
    uhd = plain_camera(width_px=3840, height_px=2160, focal_px=3150.0)
    short = plain_motion(spins(190.0, -280.0, 190.0))
    rows = [
        plain("full_hd", "1080p", scene=plain_scene(camera=hd), storage={"bitrate": 17_000_000}),
        plain("uhd", "4K", scene=plain_scene(camera=uhd), motion=short, storage={"bitrate": 45_000_000}),
        plain("film_rate", "24 frames a second", scene=plain_scene(timing=Timing(fps=24.0))),
        plain(
            "sixty", "60 frames a second", scene=plain_scene(timing=Timing(fps=60.0)), storage={"bitrate": 12_000_000}
        ),
    ]
    fast = Sensor(noise_grey=3.0, exposure_s=0.003)
    return [
        *rows,
        plain(
            "slow_motion",
            "240 frames a second",
            scene=plain_scene(timing=Timing(fps=240.0), sensor=fast),
            motion=short,
            storage={"bitrate": 20_000_000},
        ),
    ]


def odd_times() -> list[Row]:
    """Return time stamps that are not evenly spaced."""
    varying = Timing(jitter=0.15, dropped_share=0.04, slow_spans=((3.0, 6.0, 15.0),))
    return [
        plain(
            "varying_rate", "frame rate drops by half for a while, frames dropped", scene=plain_scene(timing=varying)
        ),
        plain("late_first", "first time stamp 2.5 s", scene=plain_scene(timing=Timing(first_s=2.5))),
        plain(
            "same_stamps",
            "every twentieth frame has the stamp of the one before",
            scene=plain_scene(timing=Timing(repeated_share=0.05)),
            suffix=".mkv",
            storage={"codec": "ffv1"},
        ),
    ]


def damaged_files() -> list[Row]:
    """Return files that stop or break in the middle."""
    ends = {"readable": False, "expected_words": ("the file breaks off: nothing could be read after", "flag clipped")}
    whole = {**QUICK, "container_options": {"movflags": "frag_keyframe+empty_moov"}}
    return [
        plain("cut_off", "file ends at 60 % (fragmented mp4)", storage=whole, damage=("cut", 0.6, 0.0), **ends),
        plain("cut_off_mkv", "file ends at 60 % (Matroska)", suffix=".mkv", damage=("cut", 0.6, 0.0), **ends),
        plain("no_index", "mp4 cut off before its index", damage=("cut", 0.6, 0.0), refusal="its index is missing"),
        plain(
            "spoilt",
            "a stretch of the file is garbage",
            suffix=".mkv",
            damage=("spoil", 0.4, 0.46),
            expected_events=("hidden",),
        ),
    ]


def damage_file(path: Path, item: Row, seed: int = 0) -> None:
    """Damage a written clip in place as its row says."""
    if item.damage is None:
        return
    kind, first, second = item.damage
    data = bytearray(path.read_bytes())
    if kind == "cut":
        data = data[: int(first * len(data))]
    else:
        span = slice(int(first * len(data)), int(second * len(data)))
        data[span] = np.random.default_rng(seed).bytes(span.stop - span.start)
    path.write_bytes(bytes(data))


# --- camera and light ---


def unsteady_cameras() -> list[Row]:
    """Return cameras that do not stand still."""
    slow = plain_motion()
    rest_s = slow.turns[2].end_s + 0.3
    rolling = Sensor(noise_grey=2.0, line_delay_s=0.028 / 720)
    return [
        plain(
            "nudged",
            "the stand is knocked once, between two turns",
            scene=plain_scene(camera=plain_camera(moves=(Nudge(time_s=rest_s),))),
            expected_events=("camera moved",),
        ),
        plain(
            "nudged_in_turn",
            "the stand is knocked while the cart turns",
            scene=plain_scene(camera=plain_camera(moves=(Nudge(time_s=slow.turns[2].start_s + 0.5),))),
            expected_events=("camera moved",),
            expected_words=("flag camera_moved (1)",),
            not_counted=1,
        ),
        plain("hand_held", "held by hand", scene=plain_scene(camera=plain_camera(moves=(HandHeld(seed=4),)))),
        plain(
            "hand_held_no_cards",
            "held by hand, no floor cards: no turn counts",
            scene=plain_scene(camera=plain_camera(moves=(HandHeld(seed=4),)), cards=()),
            readable=False,
            expected_events=("camera moved",),
            expected_words=("the camera never stood still and no floor card holds the view",),
        ),
        plain(
            "nudged_no_cards",
            "the stand is knocked once, no floor cards: two maps, each from the robot's own turns",
            scene=plain_scene(camera=plain_camera(moves=(Nudge(time_s=rest_s),)), cards=()),
            expected_events=("camera moved",),
            expected_words=("no floor card holds the view: each stretch has a map of its own",),
            not_counted=1,
        ),
        plain("sway", "a stand that swings", scene=plain_scene(camera=plain_camera(moves=(Sway(),)))),
        plain("breathing", "autofocus breathing", scene=plain_scene(camera=plain_camera(moves=(Breathing(),)))),
        plain("rolling_shutter", "rows taken over 28 ms", scene=plain_scene(sensor=rolling)),
        plain(
            "rolling_hand_held",
            "rows taken over 28 ms, held by hand",
            scene=plain_scene(sensor=rolling, camera=plain_camera(moves=(HandHeld(seed=6),))),
        ),
        plain(
            "stabilised",
            "digital stabilisation warps the picture by some pixels",
            scene=plain_scene(camera=plain_camera(moves=(HandHeld(seed=8),), stabiliser=Stabiliser(seed=2))),
            readable=False,
            expected_events=("camera moved",),
            expected_words=("flag warped (6)", "as digital stabilisation does"),
        ),
    ]


def changing_light() -> list[Row]:
    """Return light, exposure and focus that change."""
    dim = Light(exposure_steps=(ExposureStep(time_s=3.2, factor=0.6), ExposureStep(time_s=6.0, factor=1.5)))
    edge = ShadowEdge(at_px=(0.0, 300.0), speed_px_s=160.0, start_s=2.0, end_s=10.0, width_px=420.0, penumbra_px=12.0)
    sun = Light(
        level=0.7,
        exposure_steps=(ExposureStep(time_s=4.0, factor=1.55, ramp_s=0.6),),
        shadows=(ShadowEdge(at_px=(640.0, 360.0), direction_deg=50.0, start_s=4.0, darkness=0.45),),
    )
    focus = ((0.0, 0.0), (4.0, 0.0), (4.6, 2.5), (5.0, 0.3), (5.4, 1.2), (6.0, 0.0))
    return [
        plain("exposure_steps", "the exposure changes twice", scene=plain_scene(light=dim)),
        plain("moving_shadow", "a shadow passes over", scene=plain_scene(light=Light(shadows=(edge,)))),
        plain("sun_out", "the sun comes out, with a hard shadow edge over the cart", scene=plain_scene(light=sun)),
        plain("flicker", "lamps flicker at 100 Hz", scene=plain_scene(light=Light(flicker=0.12, flicker_hz=100.0))),
        plain("focus_hunt", "the focus hunts once", scene=plain_scene(sensor=Sensor(noise_grey=2.0, focus_px=focus))),
        plain(
            "under_exposed",
            "a dark room",
            scene=plain_scene(light=Light(level=0.16), sensor=Sensor(noise_grey=2.5, exposure_s=0.03)),
        ),
    ]


# --- what happens to the cart ---


def handled_carts() -> list[Row]:
    """Return carts that are carried, driven, or leave the picture."""
    put_back = plain_motion(
        [
            *spins(190.0, 190.0),
            Lift(dx_mm=-25.0, dy_mm=12.0, heading_deg=-178.0),
            *spins(190.0, -190.0),
            Lift(dx_mm=15.0, dy_mm=-9.0, heading_deg=5.0),
            *spins(280.0),
        ]
    )
    driven = plain_motion([*spins(190.0, -190.0), Straight(distance_mm=140.0), *spins(190.0, -280.0)])
    gone = plain_motion(
        [
            *spins(190.0, -190.0),
            Lift(dx_mm=1500.0, heading_deg=40.0),
            Wait(duration_s=1.5),
            Lift(dx_mm=-1495.0),
            *spins(190.0, -190.0),
        ]
    )
    lifts = [event for event in put_back.events if event.kind == "handled"]
    scene = plain_scene()
    hands = tuple(
        hand(scene, [(t, *seen_at(scene, put_back, t, -18.0)) for t in np.linspace(event.start_s, event.end_s, 9)])
        for event in lifts
    )
    return [
        plain("put_back", "a hand sets the cart back twice", scene=plain_scene(occluders=hands), motion=put_back,
              expected_events=("handled",)),
        plain("put_back_unseen", "the cart is set back, no hand in the picture", motion=put_back,
              expected_events=("handled",)),
        plain("driven", "the cart drives ahead between turns", motion=driven, expected_events=("driven",)),
        plain("out_of_picture", "the cart is carried out of the picture and back", motion=gone,
              expected_events=("handled",)),
    ]  # fmt: skip


def hidden_markers() -> list[Row]:
    """Return markers out of sight for a while."""
    scene, motion = plain_scene(), plain_motion()
    at_s = motion.turns[1].end_s + 0.2
    fore = seen_at(scene, motion, at_s, scene.robot.fore.x_mm)
    cover = hand(scene, [(at_s, *fore), (at_s + 0.4, *fore)], size_px=46.0)
    turning = motion.turns[2].start_s
    blink = board(seen_at(scene, motion, turning, -18.0), (190.0, 150.0), turning + 0.45, turning + 0.6)
    double = plain_motion(spins(190.0, 760.0, 190.0, -190.0))
    long_gap = board(
        seen_at(scene, double, 0.0, -18.0), (190.0, 150.0), double.turns[1].start_s - 0.2, double.turns[1].end_s + 0.2
    )
    foot_outline = ((-60.0, -150.0), (60.0, -150.0), (80.0, 40.0), (50.0, 170.0), (-50.0, 170.0), (-80.0, 40.0))
    walk_s = motion.turns[3].end_s + 0.15
    foot = Occluder(outline_px=foot_outline, path=((walk_s, -100.0, 200.0), (walk_s + 0.7, 1400.0, 520.0)), shade=0.2)
    return [
        plain("finger", "a hand covers one marker at rest", scene=plain_scene(occluders=(cover,))),
        plain("short_gap", "both markers hidden for a moment while turning", scene=plain_scene(occluders=(blink,))),
        plain("long_gap", "two revolutions happen out of sight: never to be guessed", motion=double,
              scene=plain_scene(occluders=(long_gap,)), expected_events=("hidden",), readable=False),
        plain("foot", "a foot walks through", scene=plain_scene(occluders=(foot,))),
    ]  # fmt: skip


def commands_and_turns() -> list[Row]:
    """Return turns that do not go by the list."""
    missing = plain_motion([*spins(190.0, -280.0), Missed(wheel_deg=190.0), *spins(-190.0, 280.0, 190.0)])
    extra = plain_motion([*spins(190.0, -280.0), Push(heading_deg=37.0), *spins(190.0, -190.0, 280.0)])
    halves = plain_motion([*spins(190.0, -190.0), TwoPushes(wheel_deg=280.0), *spins(-190.0, 190.0)])
    creeping = plain_motion(drive=plain_drive(creep_deg=0.5, creep_s=0.15))
    rocking = plain_motion(drive=plain_drive(rock_deg=1.2, overshoot_wheel_deg=4.0))
    return [
        plain("missing_turn", "one commanded turn does not happen", motion=missing, expected_events=("missing turn",)),
        plain("extra_turn", "somebody turns the cart by hand", motion=extra, expected_events=("uncommanded turn",),
              not_counted=1),
        plain("two_pushes", "one turn is made in two parts", motion=halves, expected_events=("two pushes",),
              not_counted=1),
        plain("creep", "the heading creeps on after each stop", motion=creeping),
        plain("rocking", "the body rocks and overshoots at each stop", motion=rocking,
              expected_words=("flag rocked",)),
        plain("short_rests", "rests of a third of a second", motion=plain_motion(rest_s=0.33)),
        plain("small_turns", "turns of 5 to 20 degrees",
              motion=plain_motion(spins(12.0, 40.0, -20.0, 30.0, -42.0, 12.0))),
        plain("many_turns_back", "turns of several revolutions",
              motion=plain_motion(spins(1520.0, -1520.0), drive=plain_drive(rate_wheel_deg_s=400.0))),
    ]  # fmt: skip


def clip_ends() -> list[Row]:
    """Return clips that begin or end while the cart turns."""
    motion = plain_motion()
    late = Timing(begin_s=motion.turns[0].start_s + 0.5)
    early = Timing(duration_s=motion.turns[-1].start_s + 0.6)
    said = {"readable": False, "expected_words": ("flag clipped (1)",)}
    return [
        plain("starts_in_turn", "the clip begins in a turn", scene=plain_scene(timing=late), **said),
        plain("ends_in_turn", "the clip ends in a turn", scene=plain_scene(timing=early), **said),
    ]


# --- markers and cards ---


def marked(**mounts: Mount) -> Scene:
    """Return the plain scene with other mounts."""
    return plain_scene(robot=replace(Robot(), **mounts))


def marker_faults() -> list[Row]:
    """Return markers that are wrong, damaged or hard to read."""
    fore, aft = Robot().fore, Robot().aft
    scene, motion = plain_scene(), plain_motion()
    spot = seen_at(scene, motion, motion.turns[0].end_s + 0.2, fore.x_mm)
    near_edge = plain_motion(start=(10.0, 288.0, 80.0))
    double = Card(card_id=0, x_mm=-150.0, y_mm=170.0, angle_deg=25.0, side_mm=40.0)
    return [
        plain("wrong_id", "the fore marker has an id that the trial file does not know",
              scene=marked(fore=replace(fore, marker_id=7)), refusal="marker 7 is in view instead"),
        plain("same_id_twice", "another print of the fore marker lies on the floor",
              scene=plain_scene(cards=(*plain_cards(), double)), refusal="is in view twice"),
        plain("ids_swapped", "fore and aft are swapped: the same heading changes",
              scene=marked(fore=replace(fore, marker_id=1), aft=replace(aft, marker_id=0))),
        plain("mirrored_print", "the fore marker is printed mirrored", refusal="a mirrored print of marker 0",
              scene=marked(fore=replace(fore, mirrored=True))),
        plain("glare", "a lamp shines back from one marker at one rest",
              scene=plain_scene(light=Light(glints=(Glint(at_px=spot, radius_px=9.0),)))),
        plain("creased", "the fore marker is folded across", scene=marked(fore=replace(fore, crease_deg=6.0)),
              expected_words=("a robot marker is creased",)),
        plain("dirty", "both markers are dirty",
              scene=marked(fore=replace(fore, dirt=0.12), aft=replace(aft, dirt=0.12))),
        plain("grey_print", "pale ink on grey paper",
              scene=marked(fore=replace(fore, ink=0.22, paper=0.5), aft=replace(aft, ink=0.22, paper=0.5))),
        plain("partly_outside", "one marker leaves the picture in some headings", motion=near_edge, readable=False),
        plain("heights", "fore marker 20 mm higher", scene=marked(fore=replace(fore, extra_height_mm=20.0))),
        plain("askew", "markers stuck on anywhere, at any angle",
              scene=marked(fore=replace(fore, y_mm=22.0, angle_deg=33.0),
                           aft=replace(aft, x_mm=-60.0, y_mm=-20.0, angle_deg=-101.0))),
        plain("code_like_floor", "the floor looks like marker modules",
              scene=plain_scene(floor=Floor(kind="chequer", seed=2), cards=())),
        plain("no_markers", "no cart in the picture", scene=plain_scene(robot=replace(Robot(), visible=False)),
              refusal="robot markers 0 and 1 of APRILTAG_36h11"),
        plain("small_code", "markers of the 4X4_50 list",
              scene=plain_scene(robot=replace(Robot(), dictionary="4X4_50"))),
        plain("small_markers", "markers 17 px a side",
              scene=plain_scene(robot=replace(Robot(), marker_side_mm=18.0))),
    ]  # fmt: skip


def card_faults() -> list[Row]:
    """Return floor cards that do not lie flat and still."""
    first, *others = plain_cards()
    motion = plain_motion()
    pushed = replace(
        first, shifts=(CardShift(time_s=motion.turns[2].end_s + 0.3, x_mm=14.0, y_mm=-9.0, angle_deg=6.0),)
    )
    return [
        plain(
            "curled_card",
            "one card curls up at its edges",
            scene=plain_scene(cards=(replace(first, curl_mm=9.0), *others)),
        ),
        plain("moved_card", "one card is pushed aside", scene=plain_scene(cards=(pushed, *others))),
        plain("one_card", "a single card", scene=plain_scene(cards=(first,))),
    ]


def fast_spins() -> list[Row]:
    """Return spins at 30 to 400 degrees a second, exposed for 1/60 s."""
    sensor = Sensor(noise_grey=2.0, exposure_s=1.0 / 60.0)
    drive = plain_drive(contact_scatter=0.012)
    per_heading = 138.0 / drive.wheel_diameter_mm
    rows = []
    for rate_deg_s in (30, 75, 150, 250, 400):
        wheel_rate = rate_deg_s * per_heading
        fast = replace(drive, rate_wheel_deg_s=wheel_rate, acceleration_wheel_deg_s2=max(600.0, 4.0 * wheel_rate))
        turns = spins(190.0, -190.0, 380.0) if rate_deg_s < 100 else spins(190.0, -380.0, 1540.0, -770.0)
        rows.append(
            plain(
                f"spin_{rate_deg_s}",
                f"spins at {rate_deg_s} degrees a second, 1/60 s exposure",
                scene=plain_scene(sensor=sensor),
                motion=plain_motion(turns, drive=fast),
            )
        )
    return rows


__all__ = ["Row", "damage_file", "robustness_rows", "row"]
