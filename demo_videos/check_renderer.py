"""Print what the renderer costs and how exactly it draws: ``python -m demo_videos.check_renderer``."""

from __future__ import annotations

import time
from dataclasses import replace

import cv2
import numpy as np

from demo_videos.render import Camera, HandHeld, Light, Mount, Renderer, Robot, Scene, Sensor, project, spin_motion
from demo_videos.render.scenes import phone_sensor

ROBOT = Robot(
    marker_side_mm=110.0,
    fore=Mount(marker_id=0, x_mm=70.0, ink=0.0, paper=1.0),
    aft=Mount(marker_id=1, x_mm=-90.0, ink=0.0, paper=1.0),
)


def cost(name: str, scene: Scene) -> None:
    motion = spin_motion([190.0], seed=1)
    renderer = Renderer(scene)
    start = time.process_time()
    renderer.frame(0.0, motion)
    first_s = time.process_time() - start
    spent = []
    for begin_s, end_s in ((0.2, 0.9), (1.1, 2.4)):
        times = np.arange(begin_s, end_s, 1 / 30)
        start = time.process_time()
        for time_s in times:
            renderer.frame(float(time_s), motion)
        spent.append(1e3 * (time.process_time() - start) / len(times))
    print(f"{name:34s} {first_s:8.2f} s {spent[0]:8.0f} ms {spent[1]:8.0f} ms")


def edge_errors(heading_deg: float, psf_px: float) -> np.ndarray:
    """Return found less true crossing of the fore marker's front edge, in px, row by row or column by column."""
    camera = Camera(width_px=640, height_px=400, focal_px=1100, distance_mm=1400, tilt_deg=22, k1=-0.12)
    light = Light(gradient=0.0, vignette=0.0)
    sensor = Sensor(psf_px=psf_px, exposure_s=0.0, noise_grey=0.0)
    scene = Scene(camera=camera, robot=ROBOT, light=light, sensor=sensor)
    picture = Renderer(scene).exposed(0.0, spin_motion([], start=(0.0, 0.0, heading_deg)))
    turn = np.deg2rad(heading_deg)
    side = np.linspace(-50.0, 50.0, 41)
    along = np.column_stack([125 * np.cos(turn) - side * np.sin(turn), 125 * np.sin(turn) + side * np.cos(turn)])
    px = project(camera, np.column_stack([along, np.full(41, ROBOT.deck_height_mm)]))
    if np.ptp(px[:, 0]) > np.ptp(px[:, 1]):
        px, picture = px[:, ::-1], picture.T
    px = px[np.argsort(px[:, 1])]
    errors = []
    for row in range(int(px[0, 1]) + 6, int(px[-1, 1]) - 5):
        true = float(np.interp(row, px[:, 1], px[:, 0]))
        low, high = round(true) - 6, round(true) + 7
        values = picture[row, low:high].astype(float)
        paper = values.sum()
        errors.append((high - 0.5 - paper if values[-1] > values[0] else low - 0.5 + paper) - true)
    return np.array(errors)


def main() -> None:
    cv2.setNumThreads(1)
    print("1080p, CPU time on one core       first frame    at rest   turning")
    base = Scene(camera=Camera(k1=-0.08))
    cost("still camera", base)
    cost("still, sharpened and tone-mapped", replace(base, sensor=phone_sensor()))
    cost("still, rolling shutter", replace(base, sensor=Sensor(line_delay_s=2.5e-5)))
    cost("hand-held", replace(base, camera=replace(base.camera, moves=(HandHeld(),))))
    for psf_px in (0.5, 0.8):
        errors = np.concatenate([edge_errors(heading, psf_px) for heading in (0, 4, 15, 90, 100, 180, 200, 270)])
        print(
            f"edge position, point spread {psf_px} px: mean {1e3 * errors.mean():+.2f}, RMS "
            f"{1e3 * np.sqrt((errors**2).mean()):.2f}, worst {1e3 * np.abs(errors).max():.2f} thousandths of a pixel"
        )


if __name__ == "__main__":
    main()
