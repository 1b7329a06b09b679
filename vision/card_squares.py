"""Floor cards as witnesses of the plane: each is a square, all are of one size, and nobody measured where they lie.

The deck is parallel to the floor, so the floor's map is the deck's after a common scale and a shift: through the deck's
map the cards appear as squares of one common size, wherever they lie. Their places and that size are eliminated; what
is left bears on the plane map and the lens alone. With little rotation of the robot that is most of what is known of
them.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from vision.markers import UNIT_CORNERS
from vision.observations import CardLook
from vision.plane import LENS, N_GLOBAL, SHAPE, Units, through_camera, to_plane
from vision.records import FloatArray
from vision.rigid import rigid_between

FLAT_PX = 0.1
"""How far corners of an ordinary card miss a flat square (standard deviation): print, curl, coding."""

CURLED_PX, CURLED_TIMES, CURLED_SHARE = 0.12, 6.0, 0.003
"""A card whose corners miss the common squares by more than this, by so many times what the others do, and by this
share of its side, is curled or does not lie on the floor, and is left out."""

FEWEST_TO_JUDGE = 3

FLATTEST_PX, FEWEST_FREE = 0.03, 5
"""No card is believed to be flatter than this; and so many degrees of freedom tell how flat they are."""

INNER_STEPS = 4


@dataclass(frozen=True, eq=False, slots=True)
class CardSquares:
    """Corners of K floor cards under a camera that stands.

    Parameters
    ----------
    ids : tuple of int
    corners_px : ndarray, shape (K, 4, 2)
        Medians over all looks.
    sigma_px : ndarray, shape (K,)
        Standard deviation of a coordinate.
    """

    ids: tuple[int, ...]
    corners_px: FloatArray
    sigma_px: FloatArray

    def without(self, ids: Sequence[int]) -> CardSquares:
        """Return the others."""
        keep = [k for k, number in enumerate(self.ids) if number not in set(ids)]
        return CardSquares(tuple(self.ids[k] for k in keep), self.corners_px[keep], self.sigma_px[keep])


@dataclass(frozen=True, eq=False, slots=True)
class CardNormal:
    """What the cards say of the global parameters, their own places eliminated.

    Parameters
    ----------
    a : ndarray, shape (21, 21)
    g : ndarray, shape (21,)
        Right-hand side: the step that the cards ask for solves ``a @ step = g``.
    cost : float
        Robust sum of squares.
    left_px : ndarray, shape (K, 4, 2)
    """

    a: FloatArray
    g: FloatArray
    cost: float
    left_px: FloatArray


def squares_of(looks: Sequence[CardLook], left_out: Sequence[int] = ()) -> CardSquares | None:
    """Return the cards of a clip whose camera stood; None if there is none."""
    ids = tuple(sorted({look.card_id for look in looks} - set(left_out)))
    if not ids:
        return None
    own = [[look for look in looks if look.card_id == number] for number in ids]
    corners = np.stack([np.median([look.corners_px for look in some], axis=0) for some in own])
    noise = np.array([np.median([look.u_px for look in some]) for some in own])
    noise = np.where(np.isfinite(noise), noise, 1.0)
    return CardSquares(ids, corners, np.hypot(noise, FLAT_PX))


def card_normal(cards: CardSquares, p: FloatArray, units: Units) -> CardNormal:
    """Return the normal equations of the cards about `p`, Cauchy weights per card."""
    size, places = _start(cards, p, units)
    for _ in range(INNER_STEPS):
        left_px, _, j_own = _linear(cards, p, units, size, places)
        weight = _weight(left_px, cards.sigma_px)
        step = np.linalg.lstsq(j_own * weight[:, None], left_px.ravel() * weight, rcond=None)[0]
        size, places = size + step[0], places + step[1:].reshape(-1, 3)
    left_px, j_global, j_own = _linear(cards, p, units, size, places)
    weight = _weight(left_px, cards.sigma_px)[:, None]
    jg, jo, right = j_global * weight, j_own * weight, left_px.ravel() * weight[:, 0]
    taken = np.linalg.lstsq(jo, np.column_stack([jg, right]), rcond=None)[0]
    free = np.column_stack([jg, right]) - jo @ taken
    a, g = free[:, :-1].T @ free[:, :-1], free[:, :-1].T @ free[:, -1]
    chi2 = np.sum((left_px / cards.sigma_px[:, None, None]) ** 2, axis=(1, 2)) / 8.0
    return CardNormal(a, g, float(np.sum(8.0 * 4.0 * np.log1p(chi2 / 4.0))), left_px)


def _start(cards: CardSquares, p: FloatArray, units: Units) -> tuple[float, FloatArray]:
    """Return the common size and a place (turn, x, y) of each card from the plane as it is."""
    points = to_plane(cards.corners_px, p, units)
    sides = np.hypot(*np.moveaxis(np.roll(points, -1, axis=1) - points, -1, 0)).mean(axis=1)
    size = float(np.median(sides))
    return size, np.array([rigid_between(UNIT_CORNERS * size, own) for own in points])


def _linear(
    cards: CardSquares, p: FloatArray, units: Units, size: float, places: FloatArray
) -> tuple[FloatArray, FloatArray, FloatArray]:
    """Return residuals (K, 4, 2) in px, and their slopes by the 21 globals and by size and places."""
    n_cards = len(cards.ids)
    c, s = np.cos(places[:, 0]), np.sin(places[:, 0])
    turn = np.stack([np.stack([c, -s], -1), np.stack([s, c], -1)], axis=-2)
    unit = np.einsum("kij,qj->kqi", turn, UNIT_CORNERS)
    points = size * unit + places[:, None, 1:]
    seen, by_point, by_camera = through_camera(p, points)
    left_px = cards.corners_px - (seen * units.half_px + units.centre_px)
    j_global = np.zeros((n_cards, 4, 2, N_GLOBAL))
    j_global[..., SHAPE.start : LENS.stop] = by_camera * units.half_px
    by_point = by_point * units.half_px
    j_own = np.zeros((n_cards, 4, 2, 1 + 3 * n_cards))
    j_own[..., 0] = np.einsum("kqij,kqj->kqi", by_point, unit)
    turned = size * np.stack([-unit[..., 1], unit[..., 0]], axis=-1)
    for k in range(n_cards):
        j_own[k, :, :, 1 + 3 * k] = np.einsum("qij,qj->qi", by_point[k], turned[k])
        j_own[k, :, :, 2 + 3 * k : 4 + 3 * k] = by_point[k]
    return left_px, j_global.reshape(8 * n_cards, -1), j_own.reshape(8 * n_cards, -1)


def _weight(left_px: FloatArray, sigma_px: FloatArray) -> FloatArray:
    """Return the square roots of the residuals' weights, shape (8 K,)."""
    chi2 = np.sum((left_px / sigma_px[:, None, None]) ** 2, axis=(1, 2)) / 8.0
    root: FloatArray = np.repeat(1.0 / (sigma_px * np.sqrt(1.0 + chi2 / 4.0)), 8)
    return root


def curled(cards: CardSquares, p: FloatArray, units: Units) -> tuple[int, ...]:
    """Return the cards that are no squares of the common size on the plane, though the others are."""
    if len(cards.ids) < FEWEST_TO_JUDGE:
        return ()
    miss = misses_px(cards, p, units)
    sides = np.hypot(*np.moveaxis(np.roll(cards.corners_px, -1, axis=1) - cards.corners_px, -1, 0)).mean(axis=1)
    limit = np.maximum(np.maximum(CURLED_PX, CURLED_TIMES * float(np.median(miss))), CURLED_SHARE * sides)
    bad: NDArray[np.bool_] = miss > limit
    return tuple(number for number, off in zip(cards.ids, bad, strict=True) if off)


def misses_px(cards: CardSquares, p: FloatArray, units: Units) -> FloatArray:
    """Return how far each card's corners miss the common squares (root mean square of a coordinate), shape (K,)."""
    left_px = card_normal(cards, p, units).left_px
    miss: FloatArray = np.sqrt(np.mean(left_px**2, axis=(1, 2)))
    return miss


def as_flat_as_they_are(cards: CardSquares, p: FloatArray, units: Units) -> CardSquares:
    """Return the cards with the standard deviation that they show themselves, within limits, in place of the usual."""
    n_left = 8 * len(cards.ids)
    freedom = n_left - 3 * len(cards.ids) - 1 - (LENS.stop - SHAPE.start)
    if freedom < FEWEST_FREE:
        return cards
    shown = float(np.sqrt(np.mean(misses_px(cards, p, units) ** 2) * n_left / freedom))
    return replace(cards, sigma_px=np.full(len(cards.ids), np.clip(shown, FLATTEST_PX, FLAT_PX)))


def heavier(cards: CardSquares, factor: float) -> CardSquares:
    """Return the cards with standard deviations so many times as small: so much more of a say."""
    return replace(cards, sigma_px=cards.sigma_px / factor)
