"""What the floor cards say: whether the camera stood still, and how well the robot's plane fits the floor's.

They also give the floor frame its origin and direction, and through their apparent size the deck's height.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from vision.bundle import Calibration
from vision.markers import UNIT_CORNERS
from vision.observations import CardLook
from vision.plane import to_plane
from vision.records import FloatArray
from vision.rigid import rigid_between


@dataclass(frozen=True, eq=False, slots=True, kw_only=True)
class CardCheck:
    """A card held against the plane that the robot's rotation found.

    Parameters
    ----------
    card_id : int
    centre_mm : ndarray, shape (2,)
        On the deck plane, y down.
    turn_rad : float
    side_mm : float
        Apparent side on the deck plane.
    out_of_square_mm : float
        Root mean square distance of its corners from the best square.
    spread_px : float
        How far its corners wandered over the clip (standard deviation over looks).
    """

    card_id: int
    centre_mm: FloatArray
    turn_rad: float
    side_mm: float
    out_of_square_mm: float
    spread_px: float


def check_cards(looks: list[CardLook], calibration: Calibration) -> list[CardCheck]:
    """Hold every card against the calibrated plane."""
    checks = []
    for card_id in sorted({look.card_id for look in looks}):
        corners = np.stack([look.corners_px for look in looks if look.card_id == card_id])
        points = to_plane(np.median(corners, axis=0), calibration.p, calibration.units) * calibration.units.length_mm
        turn_rad, x, y = rigid_between(UNIT_CORNERS, points)
        around = points - points.mean(axis=0)
        c, s = np.cos(turn_rad), np.sin(turn_rad)
        square = UNIT_CORNERS @ np.array([[c, s], [-s, c]])
        side_mm = float(np.sum(around * square) / np.sum(square**2))
        left = around - side_mm * square
        checks.append(
            CardCheck(
                card_id=card_id,
                centre_mm=np.array([x, y]),
                turn_rad=turn_rad,
                side_mm=side_mm,
                out_of_square_mm=float(np.sqrt(2.0 * np.mean(left**2))),
                spread_px=float(corners.std(axis=0).max()),
            )
        )
    return checks
