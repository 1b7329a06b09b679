"""Floor cards: squares of known side lying anywhere, looked at now and then while the robot is followed."""

from __future__ import annotations

import numpy as np

from vision.align import CornerFit, Held
from vision.frames import Frame
from vision.markers import Detection, detect, printed_modules
from vision.observations import CardLook
from vision.pair import mean_side_px, settle_corners
from vision.records import FloatArray, MarkerSetup
from vision.template import Optics, Template, build_template

LOOK_EVERY_S = 0.5
"""How often the cards are looked at while the camera stands still."""

CALM_S, LONGEST_CALM_S = 0.3, 4.0
"""A camera that has stood still for so long is believed to stand; until then the cards are looked at in every frame.

One that moves again is believed twice as late, up to the second time: it is in a hand, or it swings.
"""

STIR_PX = 0.1
"""A common shift of the cards beyond this, and beyond their noise, means that the camera moves."""

HOLD = 0.6

SHIFTED_PX = 0.1
"""A card that has shifted by less than this is compared with the same pattern as before, which is quick."""

NOISIER = 1.6
"""Unless it has become so many times noisier."""


class CardWatcher:
    """Looks at each card every half second; mutable, one per clip."""

    def __init__(self, setup: MarkerSetup) -> None:
        self._setup = setup
        self._known: dict[int, tuple[FloatArray, Template]] = {}
        self._held: dict[int, tuple[Held, float]] = {}
        self._optics = Optics(1.0)
        self._next_s = 0.0
        self._stirred_s = 0.0
        self._calm_s = CALM_S
        self._seen_s = -1.0
        self._calm: dict[int, FloatArray] = {}
        self.looks: list[CardLook] = []
        self.twice: set[int] = set()

    def start(self, frame: Frame, found: list[Detection], optics: Optics) -> None:
        """Take up the cards found in a full-frame search."""
        self._optics = optics
        wanted = set(self._setup.card_ids)
        ids = [item.marker_id for item in found if item.marker_id in wanted]
        self.twice |= {number for number in ids if ids.count(number) > 1}
        for item in found:
            if item.marker_id in wanted and item.marker_id not in self.twice:
                self._take_up(frame, item)
        self._stirred_s = frame.time_s
        self._calm = {card_id: corners_px for card_id, (corners_px, _) in self._known.items()}

    def _take_up(self, frame: Frame, item: Detection) -> None:
        black = printed_modules(self._setup.dictionary, item.marker_id)
        template = build_template(black, side_px=item.side_px, optics=self._optics)
        settled = settle_corners(frame.luma, item.corners_px, template)
        if settled is None or settled[1].explained < HOLD:
            return
        self._known[item.marker_id] = (settled[0], template)
        self._note(item.marker_id, frame.time_s, settled[0], settled[1].information, settled[1].noise_var)

    def look(self, frame: Frame) -> None:
        """Measure the cards again if it is time: in every frame while the camera moves, else now and then."""
        if frame.time_s < self._next_s or not self._known or self._seen_s == frame.time_s:
            return
        self._seen_s = frame.time_s
        for card_id, (corners_px, template) in list(self._known.items()):
            settled = self._again(frame, card_id) or self._settle(frame, card_id, corners_px, template)
            if settled is None or settled[1].explained < HOLD:
                continue
            self._known[card_id] = (settled[0], template)
            self._note(card_id, frame.time_s, settled[0], settled[1].information, settled[1].noise_var)
        self._watch(frame.time_s)

    def _again(self, frame: Frame, card_id: int) -> tuple[FloatArray, CornerFit] | None:
        """Compare a card that lies where it lay; None if it does not, or has changed."""
        if card_id not in self._held:
            return None
        held, noise_var = self._held[card_id]
        fit = held.again(frame.luma)
        if fit is None or np.abs(fit.move_px).max() > SHIFTED_PX or fit.noise_var > NOISIER * noise_var:
            return None
        return fit.corners_px + fit.move_px, fit

    def _settle(
        self, frame: Frame, card_id: int, corners_px: FloatArray, template: Template
    ) -> tuple[FloatArray, CornerFit] | None:
        self._held.pop(card_id, None)
        settled = settle_corners(frame.luma, corners_px, template)
        if settled is None or settled[1].explained < HOLD:
            return self._find_again(frame, card_id, corners_px, template)
        self._held[card_id] = (Held(settled[1]), settled[1].noise_var)
        return settled

    def _watch(self, time_s: float) -> None:
        """Decide how soon to look again, from how far the cards have shifted since the camera last stood still."""
        shifts = [self._known[card_id][0] - before for card_id, before in self._calm.items()]
        moved_px = float(np.median([np.hypot(*shift.mean(axis=0)) for shift in shifts])) if shifts else 0.0
        noise_px = float(np.median([look.u_px for look in self.looks[-len(self._known) :]]))
        if moved_px > max(STIR_PX, 4.0 * noise_px):
            if time_s - self._stirred_s > self._calm_s:
                self._calm_s = min(2.0 * self._calm_s, LONGEST_CALM_S)
            self._stirred_s = time_s
            self._calm = {card_id: corners_px for card_id, (corners_px, _) in self._known.items()}
        if time_s - self._stirred_s > self._calm_s:
            self._next_s = time_s + LOOK_EVERY_S

    def _find_again(
        self, frame: Frame, card_id: int, corners_px: FloatArray, template: Template
    ) -> tuple[FloatArray, CornerFit] | None:
        low, high = corners_px.min(axis=0), corners_px.max(axis=0)
        pad = 1.5 * mean_side_px(corners_px)
        limit = (frame.luma.shape[1], frame.luma.shape[0])
        x0, y0 = np.clip(low - pad, 0, np.array(limit) - 8).astype(int)
        x1, y1 = np.clip(high + pad, (x0 + 8, y0 + 8), limit).astype(int)
        found = detect(frame.luma[y0:y1, x0:x1], self._setup.dictionary, (card_id,))
        if len(found) != 1:
            return None
        return settle_corners(frame.luma, found[0].corners_px + np.array([x0, y0]), template)

    def _note(
        self, card_id: int, time_s: float, corners_px: FloatArray, information: FloatArray, noise_var: float
    ) -> None:
        try:
            variance = np.diag(np.linalg.inv(information)) * noise_var
        except np.linalg.LinAlgError:
            variance = np.full(8, np.inf)
        self.looks.append(CardLook(card_id, time_s, corners_px, float(np.sqrt(np.median(np.abs(variance))))))
