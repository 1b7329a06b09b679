"""Frames of a scene: background once, the cart's surroundings where something changes."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass, replace

import cv2
import numpy as np
from numpy.typing import NDArray

from demo_videos.render import artwork, textures
from demo_videos.render.camera import View, rotation_matrices, sensor_plane, to_pixels, view_at
from demo_videos.render.light import exposure, glint_field, moving_shadows, standing_light
from demo_videos.render.motion import Motion, Poses
from demo_videos.render.scene import Card, Occluder, Scene, Timing
from demo_videos.render.sensor import Development, blur
from demo_videos.render.sheets import (
    FLOOR,
    Box,
    Carrier,
    Patch,
    Sheet,
    add_change,
    box_of,
    draw,
    extra_variance_px2,
    sheet_to_camera,
)

FloatArray = NDArray[np.float64]
FloatImage = NDArray[np.float32]
CodeImage = NDArray[np.uint8] | NDArray[np.uint16]

PAD_PX = 12
BLUR_STEP_PX = 0.35
"""Motion blur is averaged over poses no further apart than this."""
MAX_POSES = 48
BODY_POSES = 3
"""All but the markers is averaged over at most so many poses."""


def render_frames(scene: Scene, motion: Motion) -> Iterator[tuple[float, CodeImage]]:
    """Yield (time in s, luma code values) for every frame of a clip.

    The time is that of the motion; the image has shape (height, width), uint8, or uint16 with 10 bits.
    """
    renderer = Renderer(scene)
    for time_s in frame_times(scene.timing, motion, scene.seed):
        yield float(time_s), renderer.frame(float(time_s), motion)


def frame_times(timing: Timing, motion: Motion, seed: int) -> FloatArray:
    """Return the times at which frames are taken."""
    end_s = motion.duration_s if timing.duration_s is None else timing.begin_s + timing.duration_s
    rng = np.random.default_rng([seed, 79])
    times: list[float] = []
    now_s = timing.begin_s
    while now_s <= end_s + 1e-9:
        times.append(now_s)
        fps = next((rate for start, end, rate in timing.slow_spans if start <= now_s < end), timing.fps)
        now_s += max(0.2, 1.0 + timing.jitter * rng.standard_normal()) / fps
    out = np.array(times)
    if timing.dropped_share:
        keep = rng.random(len(out)) >= timing.dropped_share
        keep[0] = True
        out = out[keep]
    return out


def stamp_times(timing: Timing, times: FloatArray, seed: int) -> FloatArray:
    """Return the frames' time stamps, from 0; a share of them repeats the stamp before."""
    stamps = times - times[0]
    if timing.repeated_share:
        rng = np.random.default_rng([seed, 80])
        for index in range(1, len(stamps)):
            if rng.random() < timing.repeated_share:
                stamps[index] = stamps[index - 1]
    return stamps


@dataclass(frozen=True, eq=False)
class Instant:
    """Camera and body for one sub-exposure: one pose, or one for each row of the padded picture."""

    view: View
    body: Carrier
    poses: Poses


class Renderer:
    """Draws single frames of a scene; keeps what does not change between them."""

    def __init__(self, scene: Scene) -> None:
        self.scene = scene
        camera, robot = scene.camera, scene.robot
        self.height, self.width = camera.height_px + 2 * PAD_PX, camera.width_px + 2 * PAD_PX
        self.whole = Box(0, self.height, 0, self.width)
        self.steady = not camera.moves and camera.stabiliser is None
        self.view = view_at(camera, 0.0)
        self.rays = sensor_plane(camera, PAD_PX)
        self.coarse_rays = tuple(grid.astype(np.float32) for grid in self.rays)
        self.light = standing_light(scene.light, camera, PAD_PX)
        self.floor = textures.floor_picture(scene.floor.kind, scene.floor.seed, scene.floor.contrast)
        self.sheets = artwork.robot_sheets(robot, camera, scene.seed)
        self.plates = [sheet for sheet in self.sheets if sheet.precise]
        self.wheels = artwork.wheel_sheets(robot, camera)
        self.card_sheets: dict[Card, Sheet] = {}
        self.glints = [(glint, glint_field(glint, camera, PAD_PX)) for glint in scene.light.glints]
        self.development = Development(scene.sensor, camera.height_px, camera.width_px, scene.seed)
        self.ground_key: tuple[object, ...] | None = None
        self.ground = self.soft_ground = self.light
        self.cart_key: tuple[object, ...] | None = None
        self.cart: tuple[Box, FloatImage, FloatImage | None] | None = None

    def frame(self, time_s: float, motion: Motion) -> CodeImage:
        """Return the luma code values of the frame taken at `time_s`."""
        return self.development.develop(self.exposed(time_s, motion))

    def exposed(self, time_s: float, motion: Motion) -> FloatImage:
        """Return the linear light on the sensor, without noise; shape (height, width)."""
        camera = self.scene.camera
        if camera.stabiliser is not None:
            self.rays = sensor_plane(camera, PAD_PX, time_s)
            self.coarse_rays = tuple(grid.astype(np.float32) for grid in self.rays)
        psf_px = self.psf_at(time_s)
        self.prepare_ground(time_s, psf_px)
        picture = self.soft_ground.copy()
        gloss = self.floor_gloss()
        self.paste_cart(picture, gloss, time_s, motion, psf_px)
        for occluder in self.scene.occluders:
            paste_occluder(picture, occluder, time_s, psf_px)
        for glint, field in self.glints:
            if glint.start_s <= time_s <= glint.end_s and gloss is not None:
                picture += field * np.maximum(gloss, np.float32(glint.floor_gloss))
        picture = np.ascontiguousarray(picture[PAD_PX:-PAD_PX, PAD_PX:-PAD_PX])
        self.vary_light(picture, time_s)
        return picture

    def psf_at(self, time_s: float) -> float:
        """Return the point spread's standard deviation, focus hunting included."""
        sensor = self.scene.sensor
        if not sensor.focus_px:
            return sensor.psf_px
        times, extra = zip(*sensor.focus_px, strict=True)
        return float(np.hypot(sensor.psf_px, np.interp(time_s, times, extra)))

    def floor_gloss(self) -> FloatImage | None:
        """Return an empty gloss map where glints need one."""
        return np.zeros((self.height, self.width), dtype=np.float32) if self.glints else None

    def vary_light(self, picture: FloatImage, time_s: float) -> None:
        """Apply exposure, flicker and moving shadows in place."""
        light = self.scene.light
        shadows = moving_shadows(light, self.scene.camera, time_s)
        if shadows is not None:
            picture *= shadows
        if light.flicker or light.exposure_steps:
            picture *= exposure(light, time_s + self.row_delays(0))[:, None].astype(np.float32)

    def row_delays(self, pad_px: int) -> FloatArray:
        """Return when each row is taken, relative to the middle row, in s."""
        rows = np.arange(-pad_px, self.scene.camera.height_px + pad_px, dtype=float)
        return self.scene.sensor.line_delay_s * (rows - (self.scene.camera.height_px - 1) / 2.0)

    def sub_times(self, time_s: float, count: int) -> FloatArray:
        """Return the middles of `count` equal parts of the exposure."""
        return time_s + self.scene.sensor.exposure_s * ((np.arange(count) + 0.5) / count - 0.5)

    def extreme_times(self, time_s: float) -> FloatArray:
        """Return times that span exposure and read-out."""
        reach_s = 0.5 * self.scene.sensor.exposure_s + abs(float(self.row_delays(PAD_PX)[0]))
        return time_s + reach_s * np.linspace(-1.0, 1.0, 5)

    def instant(self, times: FloatArray, motion: Motion) -> Instant:
        """Return camera and body at the given times."""
        poses = motion.at(times)
        view = self.view if not self.scene.camera.moves else view_at(self.scene.camera, times)
        return Instant(view, body_carrier(poses), poses)

    # --- the floor with its cards ---

    def prepare_ground(self, time_s: float, psf_px: float) -> None:
        """Draw the floor and its cards, unless they look as they did in the last frame."""
        cards = tuple(card_now(card, time_s) for card in self.scene.cards)
        key: tuple[object, ...] = (cards, psf_px) if self.steady else (time_s,)
        if key == self.ground_key:
            return
        self.ground_key, self.cart_key = key, None
        count = 1 if self.steady else self.camera_poses(time_s)
        total = np.zeros((self.height, self.width), dtype=np.float32)
        samples = artwork.MARKER_SAMPLES if self.steady else 4
        for sub_time_s in self.sub_times(time_s, count):
            times = np.array([sub_time_s])
            if not self.steady and self.scene.sensor.line_delay_s:
                times = sub_time_s + self.row_delays(PAD_PX)
            total += self.draw_ground(view_at(self.scene.camera, times), cards, samples)
        self.ground = total / np.float32(count)
        sigma = np.sqrt(max(psf_px**2 - extra_variance_px2(samples), 0.0))
        self.soft_ground = blur(self.ground * self.light, float(sigma))

    def camera_poses(self, time_s: float) -> int:
        """Return how many camera poses the motion blur of a moving camera needs."""
        camera = self.scene.camera
        view = view_at(camera, self.sub_times(time_s, 2) if self.scene.sensor.exposure_s else [time_s])
        points = np.array([[x, y, 0.0] for x in (-400.0, 400.0) for y in (-300.0, 300.0)])
        rays = np.einsum("mij,kmj->kmi", view.rotation, points[:, None] - view.centre_mm)
        px = to_pixels(camera, view.zoom * rays[..., 0] / rays[..., 2], view.zoom * rays[..., 1] / rays[..., 2])
        return poses_for(2.0 * float(np.hypot(*(px[:, -1] - px[:, 0]).T).max()))

    def draw_ground(self, view: View, cards: tuple[Card, ...], samples: int) -> FloatImage:
        """Return the reflectance of floor and cards, the cards with `samples` a pixel and side."""
        ground = draw_floor(self.scene, self.floor, self.rays, view, 4 if self.steady else 1)
        patch = Patch(0, 0, *self.rays, *self.coarse_rays, ground)
        for card in cards:
            sheet = self.card_sheet(card)
            box = box_of(sheet, FLOOR, view, self.scene.camera, PAD_PX)
            draw(patch, sheet, FLOOR, view, box, samples)
        return ground

    def card_sheet(self, card: Card) -> Sheet:
        """Return the sheet of a card, drawn once however often it moves."""
        key = replace(card, x_mm=0.0, y_mm=0.0, angle_deg=0.0, shifts=())
        if key not in self.card_sheets:
            self.card_sheets[key] = artwork.card_sheet(key, self.scene.robot, self.scene.camera, self.scene.seed)
        return replace(self.card_sheets[key], x_mm=card.x_mm, y_mm=card.y_mm, angle_deg=card.angle_deg)

    def view_now(self, time_s: float) -> View:
        """Return the camera's pose at one time."""
        return self.view if not self.scene.camera.moves else view_at(self.scene.camera, time_s)

    # --- the cart ---

    def paste_cart(
        self, picture: FloatImage, gloss: FloatImage | None, time_s: float, motion: Motion, psf_px: float
    ) -> None:
        """Draw the cart's surroundings and put them into the picture."""
        if not self.sheets:
            return
        span = self.instant(self.extreme_times(time_s), motion)
        still = self.steady and span.poses.still()
        key = tuple(np.round(np.concatenate([row[:1] for row in pose_rows(span.poses)]), 9)) if still else None
        if key is None or key != self.cart_key or self.cart is None:
            self.cart = self.draw_cart(time_s, motion, span, still, psf_px)
            self.cart_key = key
        box, soft, shine = self.cart
        if box.empty:
            return
        picture[box.top : box.bottom, box.left : box.right] = soft
        if gloss is not None and shine is not None:
            gloss[box.top : box.bottom, box.left : box.right] = shine

    def draw_cart(
        self, time_s: float, motion: Motion, span: Instant, still: bool, psf_px: float
    ) -> tuple[Box, FloatImage, FloatImage | None]:
        """Return the changed part of the picture as light on the sensor, and its gloss."""
        boxes = self.cart_boxes(span)
        whole = boxes[0]
        for box in boxes[1:]:
            whole = whole.joined(box)
        margin = int(np.ceil(4.5 * psf_px)) + 2
        inner = whole.grown(margin, self.height, self.width)
        outer = inner.grown(margin, self.height, self.width)
        if whole.empty:
            return inner, self.light[:0, :0], None
        count = self.cart_poses(span, still)
        samples = artwork.MARKER_SAMPLES if count <= 2 else 4 if count <= 4 else 2
        area = slice(outer.top, outer.bottom), slice(outer.left, outer.right)
        total = self.exposed_cart(self.patch_at(outer), boxes, time_s, motion, still, count, samples)
        sigma = float(np.sqrt(max(psf_px**2 - extra_variance_px2(samples), 0.0)))
        soft = blur(total.light * self.light[area], sigma)
        cut = total.area(inner)
        return inner, soft[cut], None if total.gloss is None else total.gloss[cut]

    def patch_at(self, box: Box) -> Patch:
        """Return the ground in a box as a patch to draw on."""
        area = slice(box.top, box.bottom), slice(box.left, box.right)
        gloss = np.zeros(self.ground[area].shape, dtype=np.float32) if self.glints else None
        rays = (grid[area] for grid in (*self.rays, *self.coarse_rays))
        return Patch(box.top, box.left, *rays, self.ground[area].copy(), gloss)

    def exposed_cart(
        self,
        ground: Patch,
        boxes: list[Box],
        time_s: float,
        motion: Motion,
        still: bool,
        count: int,
        samples: int,
    ) -> Patch:
        """Return the ground with the cart averaged over the exposure; only markers are drawn at all its poses."""
        middle = self.instant_at(time_s, motion, still)
        draw(ground, self.sheets[0], middle.body, middle.view, boxes[0], 1)
        total = ground.copy()
        total.light[:] = 0.0
        times = self.sub_times(time_s, count)
        for group in np.array_split(times, min(count, BODY_POSES)):
            base = ground.copy()
            instant = middle if count == 1 else self.instant_at(float(group.mean()), motion, still)
            self.paint_body(base, boxes, instant, 4 if count <= 2 else 1)
            total.light += base.light * np.float32(len(group))
            if total.gloss is not None and base.gloss is not None:
                total.gloss += base.gloss * np.float32(len(group))
            for sub_time_s in group:
                exact = middle if count == 1 else self.instant_at(float(sub_time_s), motion, still)
                for sheet, box in zip(self.sheets, boxes, strict=False):
                    if sheet.precise:
                        add_change(total, base, sheet, exact.body, exact.view, box, samples)
        total.light /= np.float32(count)
        if total.gloss is not None:
            total.gloss /= np.float32(count)
        return total

    def instant_at(self, time_s: float, motion: Motion, still: bool) -> Instant:
        """Return camera and body at one time, or at each row's time with a rolling shutter."""
        if self.scene.sensor.line_delay_s and not still:
            return self.instant(time_s + self.row_delays(PAD_PX), motion)
        return self.instant(np.array([time_s]), motion)

    def cart_boxes(self, span: Instant) -> list[Box]:
        """Return what each sheet, then each wheel, can touch in the padded picture during the frame."""
        sheets = [*self.sheets, *(wheel[0] for wheel in self.wheels)]
        return [box_of(sheet, span.body, span.view, self.scene.camera, PAD_PX) for sheet in sheets]

    def cart_poses(self, span: Instant, still: bool) -> int:
        """Return how many sub-exposures the motion blur needs."""
        exposure_s = self.scene.sensor.exposure_s
        if still or not exposure_s:
            return 1
        reach_s = exposure_s + 2.0 * abs(float(self.row_delays(PAD_PX)[0]))
        shifts = [sheet_shift_px(self.scene.camera, sheet, span) for sheet in self.plates]
        return poses_for(max(shifts) * exposure_s / reach_s)

    def paint_body(self, patch: Patch, boxes: list[Box], instant: Instant, samples: int) -> None:
        """Draw what lies between shadow and markers, from below, with the wheels' treads as they are."""
        middle = len(instant.poses.x_mm) // 2
        drawn = [(sheet, box) for sheet, box in zip(self.sheets[1:], boxes[1:], strict=False) if not sheet.precise]
        for side, wheel in enumerate(self.wheels):
            phase = tread_phase(instant.poses.wheel_deg[side, middle], self.scene.robot.wheel_diameter_mm)
            drawn.insert(1, (wheel[phase], boxes[len(self.sheets) + side]))
        for sheet, box in drawn:
            draw(patch, sheet, instant.body, instant.view, box, samples)


def draw_floor(
    scene: Scene, tile: FloatImage, rays: tuple[FloatArray, FloatArray], view: View, samples: int
) -> FloatImage:
    """Return the bare floor's reflectance over the padded picture, in bands to spare memory."""
    turn = np.deg2rad(scene.floor.angle_deg)
    axes = np.eye(3)[None].copy()
    axes[0, :2, :2] = [[np.cos(turn), -np.sin(turn)], [np.sin(turn), np.cos(turn)]]
    height, width = rays[0].shape
    out = np.empty((height, width), dtype=np.float32)
    for top in range(0, height, 128):
        band = slice(top, min(top + 128, height))
        part = view.rows(band)
        maps = part.rotation @ np.concatenate(
            [axes[:, :, :2].repeat(len(part.zoom), 0), -part.centre_mm[:, :, None]], 2
        )
        maps[:, :2] *= part.zoom[:, None, None]
        inverse = np.linalg.inv(maps)[:, :, :, None]
        x, y = rays[0][band], rays[1][band]
        w = (inverse[:, 2, 0] * x + inverse[:, 2, 1] * y + inverse[:, 2, 2]) * textures.TEXEL_MM
        col = ((inverse[:, 0, 0] * x + inverse[:, 0, 1] * y + inverse[:, 0, 2]) / w).astype(np.float32)
        row = (-(inverse[:, 1, 0] * x + inverse[:, 1, 1] * y + inverse[:, 1, 2]) / w).astype(np.float32)
        if samples > 1:
            fine = (width * samples, col.shape[0] * samples)
            col, row = (cv2.resize(grid, fine, interpolation=cv2.INTER_LINEAR) for grid in (col, row))
        values = cv2.remap(tile, col, row, cv2.INTER_LINEAR, borderMode=cv2.BORDER_WRAP)
        out[band] = values if samples == 1 else cv2.resize(values, (width, x.shape[0]), interpolation=cv2.INTER_AREA)
    return out


def card_now(card: Card, time_s: float) -> Card:
    """Return the card where it lies at a time."""
    for shift in card.shifts:
        if time_s >= shift.time_s:
            card = replace(
                card,
                x_mm=card.x_mm + shift.x_mm,
                y_mm=card.y_mm + shift.y_mm,
                angle_deg=card.angle_deg + shift.angle_deg,
            )
    return replace(card, shifts=())


def body_carrier(poses: Poses) -> Carrier:
    """Return the body's rotation (yaw, then pitch, then roll) and origin."""
    zero = np.zeros_like(poses.heading_rad)
    rotation = rotation_matrices(np.stack([zero, zero, poses.heading_rad], axis=1))
    if poses.pitch_rad.any() or poses.roll_rad.any():
        pitch = rotation_matrices(np.stack([zero, poses.pitch_rad, zero], axis=1))
        roll = rotation_matrices(np.stack([poses.roll_rad, zero, zero], axis=1))
        rotation = rotation @ pitch @ roll
    return Carrier(rotation, np.stack([poses.x_mm, poses.y_mm, poses.lift_mm], axis=1))


def pose_rows(poses: Poses) -> tuple[FloatArray, ...]:
    """Return the arrays that decide how the body looks."""
    return (poses.x_mm, poses.y_mm, poses.heading_rad, poses.lift_mm, poses.pitch_rad, poses.roll_rad)


def poses_for(blur_px: float) -> int:
    """Return how many sub-exposures a blur of this length needs."""
    if blur_px < 1e-3:
        return 1
    return int(np.clip(np.ceil(blur_px / BLUR_STEP_PX), 2, MAX_POSES))


def sheet_shift_px(camera: object, sheet: Sheet, span: Instant) -> float:
    """Return how far the sheet's farthest corner travels in the picture over the span."""
    corners = np.array([[-0.5, 0.5, 0.5, -0.5], [-0.5, -0.5, 0.5, 0.5], [1.0] * 4])
    corners[0] *= sheet.width_mm
    corners[1] *= sheet.height_mm
    rays = sheet_to_camera(sheet, span.body, span.view) @ corners
    px = to_pixels(camera, rays[:, 0] / rays[:, 2], rays[:, 1] / rays[:, 2])
    return float(np.hypot(*np.moveaxis(np.diff(px, axis=0), -1, 0)).sum(axis=0).max())


def tread_phase(wheel_deg: float, wheel_diameter_mm: float) -> int:
    """Return which picture of the tread shows at a wheel angle."""
    rolled_mm = np.deg2rad(wheel_deg) * 0.5 * wheel_diameter_mm
    share = (rolled_mm / artwork.TREAD_PITCH_MM) % 1.0
    return int(share * artwork.TREAD_PHASES) % artwork.TREAD_PHASES


def paste_occluder(picture: FloatImage, occluder: Occluder, time_s: float, psf_px: float) -> None:
    """Draw a travelling polygon over the padded picture while its path lasts."""
    times = np.array([point[0] for point in occluder.path])
    if not times[0] <= time_s <= times[-1]:
        return
    centre = [np.interp(time_s, times, [point[axis] for point in occluder.path]) for axis in (1, 2)]
    outline = np.asarray(occluder.outline_px) + centre + PAD_PX
    mask = np.zeros(picture.shape, dtype=np.float32)
    cv2.fillPoly(mask, [np.round(outline * 16).astype(np.int32)], 1.0, cv2.LINE_AA, 4)
    mask = blur(mask, float(np.hypot(psf_px, occluder.softness_px)))
    low = cv2.GaussianBlur(mask, (0, 0), 14.0)
    picture *= 1.0 - mask
    picture += mask * np.float32(occluder.shade) * (0.55 + 0.6 * low)
