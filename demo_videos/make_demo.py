"""Make the bundled clips, their trial files and their truth: ``python -m demo_videos.make_demo [NAME ...]``.

A seed library moves its trays between shelves with small shuttle carts that turn on the spot on three kinds of floor.
Everything is seeded: the same versions make the same pictures.
"""

from __future__ import annotations

import csv
import sys
from collections.abc import Sequence
from dataclasses import dataclass
from pathlib import Path

from demo_videos.render import (
    Camera,
    Card,
    Drive,
    Floor,
    Light,
    Robot,
    Scene,
    Sensor,
    ShadowEdge,
    Truth,
    render_clip,
    spin_motion,
)

HERE = Path(__file__).resolve().parent
REST_S = 0.9


@dataclass(frozen=True, kw_only=True)
class DemoScene:
    """One bundled clip."""

    name: str
    robot_name: str
    surface: str
    scene: Scene
    drive: Drive
    wheel_deg: Sequence[float]
    seed: int
    crf: float


def cards(*places: tuple[float, float, float]) -> tuple[Card, ...]:
    """Return floor cards from id 10 on at (x mm, y mm, angle deg)."""
    return tuple(Card(card_id=10 + k, x_mm=x, y_mm=y, angle_deg=a) for k, (x, y, a) in enumerate(places))


def sensor(**changes: float) -> Sensor:
    """Return a well-lit phone camera: little noise, so that the clips stay small."""
    return Sensor(noise_grey=1.0, exposure_s=0.006, **changes)


CALM = [190.0, 190.0, -190.0, -190.0] * 4
ROUGH = [185.0, -185.0, -185.0, 185.0, 185.0, 185.0, -185.0, 185.0, -185.0, -185.0, -185.0, 185.0, -185.0, 185.0]
MIXED = [95.0, 190.0, -285.0, 380.0, -95.0, -570.0, 285.0, 760.0, -190.0, -380.0, 570.0, -760.0]

DEMOS = (
    DemoScene(
        name="cork_calm",
        robot_name="shuttle 2",
        surface="cork tile",
        scene=Scene(
            camera=Camera(tilt_deg=14.0, tilt_azimuth_deg=-80.0, k1=-0.07, distance_mm=1350.0, roll_deg=3.0),
            robot=Robot(deck_height_mm=85.0),
            cards=cards((-330.0, 190.0, 12.0), (340.0, 170.0, -30.0), (-300.0, -180.0, 75.0), (330.0, -170.0, 200.0)),
            floor=Floor(kind="cork", seed=4, contrast=0.45),
            light=Light(gradient=0.25, vignette=0.2),
            sensor=sensor(),
            seed=11,
            tint=True,
        ),
        drive=Drive(contact_scatter=0.008, contact_wander=0.006),
        wheel_deg=CALM,
        seed=21,
        crf=30.0,
    ),
    DemoScene(
        name="rubber_rough",
        robot_name="shuttle 2",
        surface="ribbed rubber mat",
        scene=Scene(
            camera=Camera(tilt_deg=20.0, tilt_azimuth_deg=-120.0, k1=-0.1, distance_mm=1300.0, roll_deg=-6.0),
            robot=Robot(deck_height_mm=85.0),
            cards=cards((-320.0, 160.0, -20.0), (300.0, 190.0, 40.0), (310.0, -180.0, 110.0)),
            floor=Floor(kind="rubber", seed=7, contrast=0.7),
            light=Light(gradient=0.2, shadows=(ShadowEdge(at_px=(420.0, 300.0), direction_deg=160.0, darkness=0.3),)),
            sensor=sensor(),
            seed=12,
            tint=True,
        ),
        drive=Drive(
            contact_scatter=0.035,
            contact_wander=0.02,
            backlash_wheel_deg=7.0,
            drag_creep=0.05,
            drag_scatter=0.25,
            grain=0.004,
        ),
        wheel_deg=ROUGH,
        seed=22,
        crf=27.0,
    ),
    DemoScene(
        name="lino_mixed",
        robot_name="shuttle 5",
        surface="lino",
        scene=Scene(
            camera=Camera(tilt_deg=10.0, tilt_azimuth_deg=-60.0, k1=-0.05, distance_mm=1400.0, roll_deg=2.0),
            robot=Robot(deck_height_mm=60.0),
            cards=cards((-340.0, 180.0, 5.0), (350.0, -160.0, -60.0)),
            floor=Floor(kind="lino", seed=9, contrast=0.6),
            light=Light(gradient=0.3, gradient_direction_deg=200.0, vignette=0.15),
            sensor=sensor(),
            seed=13,
            tint=True,
        ),
        drive=Drive(contact_scatter=0.012, contact_wander=0.008, backlash_wheel_deg=2.5, rate_wheel_deg_s=230.0),
        wheel_deg=MIXED,
        seed=23,
        crf=27.0,
    ),
)


def trial_text(demo: DemoScene) -> str:
    """Return the trial file of a clip."""
    robot, first = demo.scene.robot, demo.scene.cards[0]
    ids = [card.card_id for card in demo.scene.cards]
    commands = ", ".join(f"{value:g}" for value in demo.wheel_deg)
    return (
        "[robot]\n"
        f'name = "{demo.robot_name}"\n'
        f"wheel_diameter_mm = {robot.wheel_diameter_mm}\n"
        f"inner_track_mm = {robot.inner_track_mm}\n"
        f"tyre_width_mm = {robot.tyre_width_mm}\n"
        f"marker_side_mm = {robot.marker_side_mm}\n\n"
        "[markers]\n"
        f'dictionary = "{robot.dictionary}"\n'
        f"fore = {robot.fore.marker_id}\n"
        f"aft = {robot.aft.marker_id}\n"
        f"cards = [{min(ids)}, {max(ids)}]\n\n"
        "[floor]\n"
        f'surface = "{demo.surface}"\n'
        f"card_side_mm = {first.side_mm}\n\n"
        "[commands]\n"
        f"wheel_deg = [{commands}]\n"
    )


def write_truth_table(path: Path, truth: Truth) -> None:
    """Write the true turns, one a row."""
    with path.open("w", newline="", encoding="utf-8") as file:
        rows = csv.writer(file, lineterminator="\n")
        rows.writerow(["turn", "commanded_wheel_deg", "heading_change_deg", "start_s", "end_s"])
        for turn in truth.turns:
            rows.writerow(
                [
                    turn.turn,
                    f"{turn.commanded_wheel_deg:g}",
                    f"{turn.heading_change_deg:.6f}",
                    f"{turn.start_s:.4f}",
                    f"{turn.end_s:.4f}",
                ]
            )


def make(demo: DemoScene, folder: Path) -> Path:
    """Render one clip into `folder` with its trial file and truth; return the clip's path."""
    clip = folder / f"{demo.name}.mp4"
    motion = spin_motion(demo.wheel_deg, drive=demo.drive, seed=demo.seed, rest_s=REST_S, start=(15.0, -10.0, 20.0))
    truth = render_clip(demo.scene, motion, clip, crf=demo.crf, preset="slow", gop=30)
    clip.with_name(f"{clip.name}.truth.json").unlink()
    (folder / f"{demo.name}.toml").write_text(trial_text(demo), encoding="utf-8")
    write_truth_table(folder / f"{demo.name}.truth.csv", truth)
    return clip


def main(names: Sequence[str]) -> None:
    wanted = set(names) or {demo.name for demo in DEMOS}
    for demo in DEMOS:
        if demo.name in wanted:
            clip = make(demo, HERE)
            print(f"{clip.name}: {clip.stat().st_size / 1e6:.2f} MB")


if __name__ == "__main__":
    main(sys.argv[1:])
