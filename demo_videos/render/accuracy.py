"""Scenes drawn from the ranges over which a phone measurement should be accurate.

Each seed gives one camera, one cart, one light and one list of turns. What is not being varied is as in a careful
trial: the camera stands still, the cart stays in the picture.
"""

from __future__ import annotations

from dataclasses import dataclass, field, replace

import numpy as np

from demo_videos.render.artwork import mm_per_px
from demo_videos.render.camera import project
from demo_videos.render.motion import Drive, Motion, spin_motion
from demo_videos.render.moves import HandHeld
from demo_videos.render.scene import Camera, Card, Floor, Light, Mount, Robot, Scene, Sensor

FLOORS = ("cork", "lino", "rubber", "wood", "plain")
BITRATE = 17_000_000
"""What phones write for 1080p H.264."""
MARGIN_PX = 24.0


@dataclass(frozen=True, kw_only=True)
class AccuracyCase:
    """One clip to measure: what is filmed, and what was drawn for it."""

    name: str
    scene: Scene
    motion: Motion
    drawn: dict[str, float | str | bool] = field(default_factory=dict)
    """Tilt, k1, deck height and so on, for grouping results."""


def accuracy_case(
    seed: int,
    *,
    cards: bool = True,
    hand_held: bool = False,
    height_step_mm: float = 0.0,
    phone_picture: bool | None = None,
    n_turns: int = 8,
    rest_s: float = 0.8,
) -> AccuracyCase:
    """Return the case of a seed.

    Parameters
    ----------
    seed
        Chooses tilt (5 to 25 degrees), k1 (0 to -0.15), deck height (30 to 150 mm), camera distance (1.2 to 2.5 m),
        marker side (30 to 60 px), the cart's place (up to 400 mm from the picture's centre), floor, light, turns.
    cards
        Lay four to six floor cards around the cart.
    hand_held
        Hold the camera by hand instead of on a stand.
    height_step_mm
        How much higher the fore marker is mounted than the aft one.
    phone_picture
        Sharpened and tone-mapped; for every other seed when None.
    n_turns, rest_s
        Length of the trial.
    """
    rng = np.random.default_rng([seed, 81])
    camera = drawn_camera(rng)
    robot = drawn_robot(rng, camera, height_step_mm)
    place = drawn_place(rng, camera, robot)
    phone = seed % 2 == 1 if phone_picture is None else phone_picture
    scene = Scene(
        camera=replace(camera, moves=(HandHeld(seed=seed, shift_mm=5.0, angle_deg=0.3),)) if hand_held else camera,
        robot=robot,
        cards=drawn_cards(rng, camera, robot, place) if cards or hand_held else (),
        floor=Floor(kind=FLOORS[int(rng.integers(len(FLOORS)))], seed=int(rng.integers(1, 4)), contrast=0.7),
        light=Light(
            gradient=rng.uniform(0.0, 0.35), gradient_direction_deg=rng.uniform(0, 360), vignette=rng.uniform(0, 0.3)
        ),
        sensor=phone_sensor() if phone else Sensor(),
        seed=seed,
    )
    turns = drawn_turns(rng, n_turns)
    drive = Drive(rate_wheel_deg_s=rng.uniform(120.0, 240.0), contact_scatter=0.02)
    motion = spin_motion(turns, drive=drive, seed=seed, rest_s=rest_s, start_delay_s=rest_s, start=place)
    side_px = robot.marker_side_mm / mm_per_px(camera, robot.deck_height_mm)
    return AccuracyCase(
        name=f"case_{seed:03d}",
        scene=scene,
        motion=motion,
        drawn={
            "tilt_deg": camera.tilt_deg,
            "k1": camera.k1,
            "deck_height_mm": robot.deck_height_mm,
            "distance_mm": camera.distance_mm,
            "marker_side_px": side_px,
            "off_centre_mm": float(np.hypot(place[0], place[1])),
            "floor": scene.floor.kind,
            "phone_picture": phone,
            "hand_held": hand_held,
            "cards": bool(scene.cards),
            "height_step_mm": height_step_mm,
        },
    )


def phone_sensor() -> Sensor:
    """Return a camera that brightens the middle tones, deepens contrast and sharpens."""
    return Sensor(gamma=1.8, s_curve=0.35, sharpen=0.6, sharpen_radius_px=1.3, noise_grey=1.5, shot_share=0.6)


def drawn_camera(rng: np.random.Generator) -> Camera:
    """Return a still 1080p camera."""
    return Camera(
        focal_px=rng.uniform(1400.0, 1600.0),
        distance_mm=rng.uniform(1200.0, 2500.0),
        tilt_deg=rng.uniform(5.0, 25.0),
        tilt_azimuth_deg=rng.uniform(-180.0, 180.0),
        roll_deg=rng.uniform(-15.0, 15.0),
        k1=-rng.uniform(0.0, 0.15),
    )


def drawn_robot(rng: np.random.Generator, camera: Camera, height_step_mm: float) -> Robot:
    """Return a cart whose markers look 30 to 60 px large, three and a bit sides apart, stuck on a little askew."""
    deck_mm = rng.uniform(30.0, 150.0)
    side_mm = rng.uniform(30.0, 60.0) * mm_per_px(camera, deck_mm)
    apart_mm = rng.uniform(2.6, 3.6) * side_mm
    ahead_mm = rng.uniform(-0.15, 0.15) * apart_mm
    fore = Mount(
        marker_id=0,
        x_mm=0.5 * apart_mm + ahead_mm,
        y_mm=rng.uniform(-2.0, 2.0),
        angle_deg=rng.uniform(-4.0, 4.0),
        extra_height_mm=height_step_mm,
    )
    turned = float(rng.choice([0.0, 90.0, 180.0]))
    aft = Mount(marker_id=1, x_mm=ahead_mm - 0.5 * apart_mm, y_mm=rng.uniform(-2.0, 2.0), angle_deg=turned)
    length_mm = apart_mm + 1.9 * side_mm
    return Robot(
        marker_side_mm=side_mm,
        fore=fore,
        aft=aft,
        deck_height_mm=deck_mm,
        deck_length_mm=length_mm,
        deck_width_mm=max(1.7 * side_mm, 90.0),
        deck_centre_mm=ahead_mm,
        inner_track_mm=max(1.7 * side_mm, 90.0) + 8.0,
        wheel_diameter_mm=min(64.0, 1.1 * deck_mm),
    )


def reach_mm(robot: Robot) -> float:
    """Return the radius of the circle that the cart sweeps when it spins."""
    ends = (robot.deck_centre_mm + 0.5 * robot.deck_length_mm, 0.5 * robot.deck_length_mm - robot.deck_centre_mm)
    return float(np.hypot(max(ends), 0.5 * robot.deck_width_mm))


def drawn_place(rng: np.random.Generator, camera: Camera, robot: Robot) -> tuple[float, float, float]:
    """Return x, y (mm) and heading (deg) up to 400 mm from the picture's centre, with the cart in the picture."""
    furthest_mm = 400.0
    while True:
        off_mm, turn = furthest_mm * np.sqrt(rng.uniform()), rng.uniform(0.0, 2.0 * np.pi)
        place = off_mm * np.cos(turn), off_mm * np.sin(turn)
        if in_picture(camera, *place, reach_mm(robot) + 15.0, robot.deck_height_mm + 25.0):
            return float(place[0]), float(place[1]), float(rng.uniform(-180.0, 180.0))
        furthest_mm *= 0.97


def in_picture(camera: Camera, x_mm: float, y_mm: float, radius_mm: float, height_mm: float) -> bool:
    """Return whether a circle lies wholly in the picture, on the floor and at a height."""
    turn = np.linspace(0.0, 2.0 * np.pi, 24)
    for z_mm in (0.0, height_mm):
        ring = [x_mm + radius_mm * np.cos(turn), y_mm + radius_mm * np.sin(turn), np.full(24, z_mm)]
        px = project(camera, np.column_stack(ring))
        limits = np.array([camera.width_px - 1, camera.height_px - 1])
        if np.any(px < MARGIN_PX) or np.any(px > limits - MARGIN_PX):
            return False
    return True


def drawn_cards(
    rng: np.random.Generator, camera: Camera, robot: Robot, place: tuple[float, float, float]
) -> tuple[Card, ...]:
    """Return four to six cards in the picture, clear of the cart and of each other."""
    side_mm = max(60.0, 36.0 * mm_per_px(camera, 0.0))
    count = int(rng.integers(4, 7))
    cards: list[Card] = []
    for _ in range(4000):
        if len(cards) == count:
            break
        x_mm, y_mm = rng.uniform(-0.62, 0.62) * camera.distance_mm, rng.uniform(-0.4, 0.4) * camera.distance_mm
        half_mm = 1.0 * side_mm
        clear_of_cart = np.hypot(x_mm - place[0], y_mm - place[1]) > reach_mm(robot) + half_mm + 70.0
        clear = all(np.hypot(x_mm - card.x_mm, y_mm - card.y_mm) > 3.0 * side_mm for card in cards)
        if clear_of_cart and clear and in_picture(camera, x_mm, y_mm, half_mm, 0.0):
            cards.append(
                Card(card_id=10 + len(cards), x_mm=x_mm, y_mm=y_mm, angle_deg=rng.uniform(0, 360), side_mm=side_mm)
            )
    return tuple(cards)


def drawn_turns(rng: np.random.Generator, n_turns: int) -> list[float]:
    """Return wheel degrees for turns of about 45 to 270 degrees of heading, both ways."""
    sizes = rng.choice([95.0, 190.0, 190.0, 190.0, 280.0, 380.0, 560.0], n_turns)
    signs = rng.choice([-1.0, 1.0], n_turns)
    return [float(value) for value in sizes * signs]
