"""Named scenes for benches and tests: the accuracy ranges, and one clip for everything unusual."""

from demo_videos.render.accuracy import AccuracyCase, accuracy_case, phone_sensor
from demo_videos.render.mishaps import damage_file, robustness_rows, row
from demo_videos.render.rows import Row, plain_motion, plain_scene

__all__ = [
    "AccuracyCase",
    "Row",
    "accuracy_case",
    "damage_file",
    "phone_sensor",
    "plain_motion",
    "plain_scene",
    "robustness_rows",
    "row",
]
