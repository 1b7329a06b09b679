"""A renderer for clips of a cart turning on a floor, with the truth beside them.

>>> from demo_videos.render import Camera, Robot, Scene, render_frames, spin_motion
>>> scene = Scene(camera=Camera(tilt_deg=20.0, k1=-0.1), robot=Robot(deck_height_mm=120.0))
>>> motion = spin_motion([190.0, -190.0], seed=3)
>>> time_s, luma = next(render_frames(scene, motion))
>>> luma.shape
(1080, 1920)
"""

from demo_videos.render.camera import project
from demo_videos.render.clip import Truth, render_clip
from demo_videos.render.frames import Renderer, frame_times, render_frames
from demo_videos.render.motion import (
    Drive,
    EventTruth,
    Lift,
    Missed,
    Motion,
    Push,
    Spin,
    Straight,
    TurnTruth,
    TwoPushes,
    Wait,
    play,
    spin_motion,
)
from demo_videos.render.moves import Breathing, HandHeld, Nudge, Stabiliser, Sway
from demo_videos.render.scene import (
    Camera,
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

__all__ = [
    "Breathing",
    "Camera",
    "Card",
    "CardShift",
    "Drive",
    "EventTruth",
    "ExposureStep",
    "Floor",
    "Glint",
    "HandHeld",
    "Lift",
    "Light",
    "Missed",
    "Motion",
    "Mount",
    "Nudge",
    "Occluder",
    "Push",
    "Renderer",
    "Robot",
    "Scene",
    "Sensor",
    "ShadowEdge",
    "Spin",
    "Stabiliser",
    "Straight",
    "Sway",
    "Timing",
    "Truth",
    "TurnTruth",
    "TwoPushes",
    "Wait",
    "frame_times",
    "play",
    "project",
    "render_clip",
    "render_frames",
    "spin_motion",
]
