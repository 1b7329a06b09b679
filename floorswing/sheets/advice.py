"""The words on the first sheet."""

from __future__ import annotations

from collections.abc import Sequence

BAR_MM = 150.0
SHORT_BAR_MM = 100.0

ADVICE: tuple[tuple[str, tuple[str, ...]], ...] = (
    (
        "Print and check",
        (
            "Print at 100 % (actual size, no fitting to the page), on matt paper.",
            "Lay a ruler along both bars at the foot of each sheet: 150 mm across, 100 mm up. If the sheet "
            "came out smaller or larger, either print it again or enter the sides from the table below in "
            "the trial file. Angles do not depend on the side; positions in millimetres do.",
            "If one bar is right and the other is not, the squares are not square. Print on another "
            "printer: that does reach the angles.",
        ),
    ),
    (
        "Mount",
        (
            "Choose the largest pair that fits the deck. Glue it to stiff card, cut along the dashed lines, "
            "and keep the white border whole.",
            "FORE towards the front, AFT towards the rear, as far apart as the deck allows, both at the "
            "same height, flat and firm. The arrows point ahead; a few degrees askew do no harm.",
            "Floor cards are needed when the phone is held by hand or may be nudged. Lay three or more "
            "flat around the robot, clear of its path, and tape them down. With the phone fixed you can do "
            "without.",
        ),
    ),
    (
        "Film",
        (
            "Fix the phone above the floor, looking down at a slant of up to about 30 degrees, the whole "
            "robot in view in every heading. A marker side should cover 40 pixels or more.",
            "Even, bright light, so that the shutter is short. Lock focus and exposure; no zoom, no video "
            "stabilisation.",
            "Start recording, wait two seconds, then drive the commands in their order, with a rest of "
            "about a second after each turn. Wait two seconds before you stop.",
        ),
    ),
    (
        "Take care",
        (
            "Secure the phone with a clamp and a line, so that it cannot fall on anyone.",
            "Keep hands, hair and sleeves away from the wheels; switch the robot off before you reach in.",
            "Keep people, animals and cables out of the area.",
            "The rules of your site, and local law, come before anything on this sheet.",
        ),
    ),
)

MEASURED_MM = (144.0, 145.5, 147.0, 148.5, 149.0, 149.5, 150.0, 150.5, 151.0)
"""What the long bar may measure, for the table."""


def side_table(sides_mm: Sequence[float]) -> list[list[str]]:
    """Return the table of what to enter for each printed side, by the measured length of the long bar."""
    head = [f"{BAR_MM:g} mm bar measures", *(f"{side_mm:g} mm side" for side_mm in sides_mm)]
    rows = [
        [f"{measured_mm:.1f} mm", *(f"{side_mm * measured_mm / BAR_MM:.2f}" for side_mm in sides_mm)]
        for measured_mm in MEASURED_MM
    ]
    return [head, *rows]
