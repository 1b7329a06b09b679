"""What a row of the robustness table is made of, and the plain trial that each row departs from."""

from __future__ import annotations

from dataclasses import dataclass, field, replace
from functools import cache

import numpy as np

from demo_videos.render.camera import project
from demo_videos.render.motion import Action, Drive, Motion, Spin, play
from demo_videos.render.scene import Camera, Card, Floor, Occluder, Robot, Scene, Sensor


@dataclass(frozen=True, kw_only=True)
class Row:
    """One clip of the robustness table."""

    name: str
    what: str
    """One sentence: what is unusual in it."""
    scene: Scene
    motion: Motion
    suffix: str = ".mp4"
    storage: dict[str, object] = field(default_factory=dict)
    """Keywords of `render_clip`."""
    damage: tuple[str, float, float] | None = None
    """("cut", share kept, 0), or ("spoil", from share, to share), to be done to the file; see `damage_file`."""
    expected_events: tuple[str, ...] = ()
    """Kinds that must be reported, in the words of `EventTruth`, besides what goes wrong with the file."""
    readable: bool = True
    """Whether the markers can be read at both rests of every turn."""
    command_count: int | None = None
    """How many commands a trial file for this clip lists when not all that the motion knows."""
    refusal: str | None = None
    """Words of the one line with which the clip must be refused; None if it must be measured."""
    expected_words: tuple[str, ...] = ()
    """Words that must be among what is said: flags as ``flag name``, events as ``event kind``, warnings."""
    not_counted: int = 0
    """How many turns cannot count though the markers are readable at both rests."""
    quiet: bool = False
    """Whether nothing at all may be said about the clip."""


SIZE = {"width_px": 1280, "height_px": 720, "focal_px": 1050.0}
PLACE = (10.0, 15.0, 35.0)
"""Start of the cart: x, y (mm), heading (deg)."""


def plain_camera(**changes: object) -> Camera:
    """Return a 720p camera on a stand."""
    base = Camera(**SIZE, distance_mm=1150.0, tilt_deg=14.0, tilt_azimuth_deg=-75.0, roll_deg=4.0, k1=-0.06)
    return replace(base, **changes)


def plain_cards() -> tuple[Card, ...]:
    """Return four floor cards around the cart."""
    places = ((-340.0, 210.0, 15.0), (360.0, 190.0, -40.0), (-350.0, -200.0, 80.0), (350.0, -190.0, 190.0))
    return tuple(Card(card_id=10 + k, x_mm=x, y_mm=y, angle_deg=a) for k, (x, y, a) in enumerate(places))


def plain_scene(**changes: object) -> Scene:
    """Return the plain trial's scene: lino, even light, four cards."""
    base = Scene(
        camera=plain_camera(),
        robot=Robot(),
        cards=plain_cards(),
        floor=Floor(kind="lino", seed=3, contrast=0.7),
        sensor=Sensor(noise_grey=2.0),
        seed=5,
    )
    return replace(base, **changes)


def plain_drive(**changes: object) -> Drive:
    """Return a cart with ordinary scatter."""
    return replace(Drive(contact_scatter=0.012, rate_wheel_deg_s=200.0), **changes)


TURNS = (190.0, -190.0, 280.0, 190.0, -280.0, -190.0)


def spins(*wheel_deg: float) -> list[Action]:
    """Return spin turns; the plain trial's six when none are given."""
    return [Spin(wheel_deg=value) for value in (wheel_deg or TURNS)]


@cache
def usual_motion() -> Motion:
    """Return the plain trial's motion."""
    return play(spins(), drive=plain_drive(), seed=9, rest_s=0.9, start=PLACE)


def plain_motion(actions: list[Action] | None = None, **changes: object) -> Motion:
    """Return the motion of a script, the plain trial's when None."""
    if actions is None and not changes:
        return usual_motion()
    settings: dict[str, object] = {"drive": plain_drive(), "seed": 9, "rest_s": 0.9, "start": PLACE, **changes}
    return play(spins() if actions is None else actions, **settings)


def seen_at(scene: Scene, motion: Motion, time_s: float, x_mm: float = 0.0, y_mm: float = 0.0) -> tuple[float, float]:
    """Return where a point of the deck (robot frame) appears at a time, in px."""
    pose = motion.at(time_s)
    cos, sin = np.cos(pose.heading_rad[0]), np.sin(pose.heading_rad[0])
    point = [pose.x_mm[0] + cos * x_mm - sin * y_mm, pose.y_mm[0] + sin * x_mm + cos * y_mm]
    px = project(scene.camera, [[*point, scene.robot.deck_height_mm + pose.lift_mm[0]]], time_s)
    return float(px[0, 0]), float(px[0, 1])


def hand(scene: Scene, targets: list[tuple[float, float, float]], *, size_px: float = 70.0) -> Occluder:
    """Return a hand with its arm that comes in from below, visits (time, x, y) in order, and goes out again."""
    arm_px = 1.6 * scene.camera.height_px
    turn = np.linspace(0.15 * np.pi, -1.15 * np.pi, 16)
    palm = np.column_stack([np.cos(turn), np.sin(turn) * 1.25]) * size_px
    arm = np.array([[-0.6 * size_px, arm_px], [0.6 * size_px, arm_px]])
    outline = tuple((float(x), float(y)) for x, y in np.vstack([palm, arm]))
    first, last = targets[0], targets[-1]
    outside = scene.camera.height_px + 1.5 * size_px
    path = ((first[0] - 0.4, first[1], outside), *targets, (last[0] + 0.4, last[1], outside))
    return Occluder(outline_px=outline, path=path)


def board(at_px: tuple[float, float], half_px: tuple[float, float], start_s: float, end_s: float) -> Occluder:
    """Return a board that is pushed in from the left, lies still from `start_s` to `end_s`, and is drawn back."""
    w, h = half_px
    outline = ((-w, -h), (w, -h), (w, h), (-w, h))
    x, y = at_px
    away = -w - 20.0
    path = ((start_s - 0.4, away, y), (start_s, x, y), (end_s, x, y), (end_s + 0.4, away, y))
    return Occluder(outline_px=outline, path=path, shade=0.45)
