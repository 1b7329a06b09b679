"""How well a preview foresees what measuring states: ``python -m bench.preview [--cache DIR] [--only NAME ...]``.

Two dozen set-ups, from good to hopeless, are rendered and measured. For each, side by side: the standard uncertainty
of a turn that the preview foresees from the first two seconds, the one that the whole measurement states (root mean
square over its turns), their ratio, the root mean square of the true errors, and the verdict for wanted uncertainties
of 0.02, 0.1 and 1 degree (plus or minus, about 95 %). A verdict is right if the expanded uncertainty that was stated is
below (above) what was wanted where the preview said that it will do (will not do), and within its doubt of a factor 1.5
where it called the case close.

Clips in the cache folder are used again; empty it after a change to the renderer.
"""

from __future__ import annotations

import argparse
import tempfile
from collections.abc import Sequence
from dataclasses import dataclass, field, replace
from pathlib import Path

import numpy as np

from demo_videos.render import (
    Camera,
    Card,
    Floor,
    HandHeld,
    Light,
    Mount,
    Robot,
    Scene,
    Sensor,
    render_clip,
    spin_motion,
)
from demo_videos.render.clip import truth_of
from demo_videos.render.motion import Drive
from demo_videos.render.scenes import phone_sensor, plain_scene
from floorswing.pipeline import measure_clip
from floorswing.previewing import SURE, Preview, preview
from floorswing.trial import Trial, read_trial
from vision.errors import VisionError
from vision.records import MarkerSetup

WANTED_DEG = (0.02, 0.1, 1.0)
TURNS = (190.0, 190.0, -190.0, 190.0, -190.0, -190.0)
REST_S = 1.2

HD = Camera(distance_mm=1500.0, tilt_deg=12.0, k1=-0.05)


@dataclass(frozen=True, kw_only=True)
class SetUp:
    """One set-up; `storage` as in `render_clip`."""

    name: str
    scene: Scene
    storage: dict[str, object] = field(default_factory=lambda: {"bitrate": 17_000_000})


def hd_scene(**changes: object) -> Scene:
    """Return a scene filmed in 1080p."""
    return replace(Scene(camera=HD, cards=_cards(), floor=Floor(kind="lino", seed=2, contrast=0.7), seed=9), **changes)


def _cards() -> tuple[Card, ...]:
    places = ((-380.0, 230.0, 15.0), (390.0, 210.0, -40.0), (-390.0, -220.0, 80.0), (380.0, -210.0, 190.0))
    return tuple(Card(card_id=10 + k, x_mm=x, y_mm=y, angle_deg=a) for k, (x, y, a) in enumerate(places))


def _apart(robot: Robot, apart_mm: float) -> Robot:
    return replace(
        robot,
        fore=Mount(marker_id=0, x_mm=0.5 * apart_mm),
        aft=Mount(marker_id=1, x_mm=-0.5 * apart_mm, angle_deg=90.0),
    )


def set_ups() -> list[SetUp]:
    """Return the set-ups, good ones first."""
    small = plain_scene()
    noisy = Sensor(noise_grey=14.0)
    return [
        SetUp(name="careful", scene=hd_scene()),
        SetUp(name="no card", scene=hd_scene(cards=())),
        SetUp(name="50 Mbit/s", scene=hd_scene(seed=3), storage={"bitrate": 50_000_000}),
        SetUp(name="phone picture", scene=hd_scene(sensor=phone_sensor())),
        SetUp(name="near", scene=hd_scene(camera=replace(HD, distance_mm=1000.0))),
        SetUp(name="HEVC", scene=hd_scene(seed=4), storage={"bitrate": 8_000_000, "codec": "hevc"}),
        SetUp(name="720p", scene=small, storage={"bitrate": 8_000_000}),
        SetUp(name="720p, 2 Mbit/s", scene=small, storage={"bitrate": 2_000_000}),
        SetUp(name="720p, 0.5 Mbit/s", scene=small, storage={"bitrate": 500_000}),
        SetUp(name="far", scene=hd_scene(camera=replace(HD, distance_mm=2500.0))),
        SetUp(name="very far", scene=plain_scene(camera=replace(small.camera, distance_mm=1900.0)),
              storage={"bitrate": 4_000_000}),
        SetUp(name="very far, 1 Mbit/s", scene=plain_scene(camera=replace(small.camera, distance_mm=1900.0)),
              storage={"bitrate": 1_000_000}),
        SetUp(name="out of reach", scene=plain_scene(camera=replace(small.camera, distance_mm=3800.0)),
              storage={"bitrate": 1_000_000}),
        SetUp(name="dim and noisy", scene=plain_scene(sensor=noisy, light=Light(level=0.35)),
              storage={"bitrate": 8_000_000}),
        SetUp(name="noisy", scene=plain_scene(sensor=noisy), storage={"bitrate": 8_000_000}),
        SetUp(name="out of focus", scene=plain_scene(sensor=Sensor(psf_px=2.6)), storage={"bitrate": 8_000_000}),
        SetUp(name="far out of focus", scene=plain_scene(sensor=Sensor(psf_px=5.0, noise_grey=4.0)),
              storage={"bitrate": 2_000_000}),
        SetUp(name="steep", scene=plain_scene(camera=replace(small.camera, tilt_deg=42.0)),
              storage={"bitrate": 8_000_000}),
        SetUp(name="in the hand", scene=plain_scene(camera=replace(small.camera, moves=(HandHeld(seed=3),))),
              storage={"bitrate": 8_000_000}),
        SetUp(name="markers close together", scene=plain_scene(robot=_apart(Robot(), 56.0), cards=()),
              storage={"bitrate": 8_000_000}),
        SetUp(name="lossless", scene=small, storage={"codec": "ffv1"}),
        SetUp(name="pale print", scene=plain_scene(robot=replace(
            Robot(), fore=Mount(marker_id=0, x_mm=48.0, ink=0.45), aft=Mount(marker_id=1, x_mm=-84.0, ink=0.45))),
              storage={"bitrate": 4_000_000}),
    ]  # fmt: skip


def trial_of(scene: Scene, folder: Path) -> Trial:
    """Write and read the trial file of a scene."""
    path = folder / "trial.toml"
    cards = f"\ncard_side_mm = {scene.cards[0].side_mm}" if scene.cards else ""
    path.write_text(
        f'[robot]\nname = "cart"\nwheel_diameter_mm = 64.0\ninner_track_mm = 118.0\ntyre_width_mm = 20.0\n'
        f"marker_side_mm = {scene.robot.marker_side_mm}\n[floor]\nsurface = \"lino\"{cards}\n"
        f"[commands]\nwheel_deg = {list(TURNS)}\n",
        encoding="utf-8",
    )
    return read_trial(path)


@dataclass(frozen=True, kw_only=True)
class Outcome:
    """What was foreseen and what came."""

    name: str
    foreseen: Preview
    stated_deg: float
    expanded_deg: float
    error_deg: float
    n_turns: int

    @property
    def ratio(self) -> float:
        """Foreseen over stated; 1 where both are infinite."""
        if not np.isfinite(self.foreseen.u_deg) and not np.isfinite(self.stated_deg):
            return 1.0
        return self.foreseen.u_deg / self.stated_deg

    def verdict_is_right(self, want_deg: float) -> bool:
        """Return whether the verdict agrees with what measuring stated."""
        verdict = replace(self.foreseen, want_deg=want_deg).verdict
        if verdict == "close":
            return want_deg / SURE**2 < self.expanded_deg < want_deg * SURE**2
        return (self.expanded_deg <= want_deg) == (verdict == "will do")


def tried(set_up: SetUp, cache: Path) -> Outcome:
    """Render, preview and measure one set-up."""
    motion = spin_motion(TURNS, drive=Drive(rate_wheel_deg_s=200.0), seed=2, rest_s=REST_S, start_delay_s=REST_S,
                         start=(10.0, 15.0, 35.0))  # fmt: skip
    suffix = ".mkv" if set_up.storage.get("codec") == "ffv1" else ".mp4"
    clip = cache / (set_up.name.replace(" ", "_").replace("/", "_").replace(",", "") + suffix)
    if not clip.exists():
        part = clip.with_name(f"part_{clip.name}")
        render_clip(set_up.scene, motion, part, **set_up.storage)
        part.rename(clip)
    with tempfile.TemporaryDirectory() as folder:
        trial = trial_of(set_up.scene, Path(folder))
        foreseen = preview(clip, trial, rate_deg_s=95.0, rest_s=REST_S)
    stated, expanded, errors, n_turns = measured(clip, trial.marker_setup(), truth_of(set_up.scene, motion).turns)
    return Outcome(
        name=set_up.name, foreseen=foreseen, stated_deg=stated, expanded_deg=expanded, error_deg=errors, n_turns=n_turns
    )


def measured(clip: Path, setup: MarkerSetup, turns: Sequence[object]) -> tuple[float, float, float, int]:
    """Return the root mean squares of stated, expanded uncertainty and true error (deg), and the number of turns."""
    try:
        result = measure_clip(clip, setup)
    except VisionError:
        return np.inf, np.inf, np.nan, 0
    known, errors = [], []
    for true in turns:
        found = [t for t in result.turns if t.start_s < true.end_s and t.end_s > true.start_s]
        if len(found) == 1 and np.isfinite(found[0].u_heading_change_deg):
            known.append(found[0])
            errors.append(found[0].heading_change_deg - true.heading_change_deg)
    if len(known) < 0.5 * len(turns):
        return np.inf, np.inf, np.nan, len(known)
    stated = root_mean_square([turn.u_heading_change_deg for turn in known])
    expanded = root_mean_square([turn.expanded_deg for turn in known])
    return stated, expanded, root_mean_square(errors), len(known)


def root_mean_square(values: Sequence[float]) -> float:
    return float(np.sqrt(np.mean(np.square(values))))


def main() -> None:
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("--cache", type=Path, help="folder that keeps the rendered clips; default: a temporary one")
    parser.add_argument("--only", nargs="*", help="these set-ups alone")
    options = parser.parse_args()
    with tempfile.TemporaryDirectory() as place:
        cache = options.cache or Path(place)
        cache.mkdir(parents=True, exist_ok=True)
        show([item for item in set_ups() if not options.only or item.name in options.only], cache)


def show(chosen: list[SetUp], cache: Path) -> None:
    """Print the table and what it comes to."""
    print(
        "| set-up | side px | foreseen u deg | stated u deg | ratio | foreseen, stated +/- deg | true error deg "
        "| turns | verdicts | advice |"
    )
    print("| :--- | ---: | ---: | ---: | ---: | ---: | ---: | ---: | :--- | :--- |")
    outcomes = []
    for item in chosen:
        one = tried(item, cache)
        outcomes.append(one)
        side = f"{one.foreseen.prospect.side_px:.0f}" if one.foreseen.prospect is not None else "-"
        verdicts = ", ".join(
            f"{want:g}: {replace(one.foreseen, want_deg=want).verdict}{' (WRONG)' * (not one.verdict_is_right(want))}"
            for want in WANTED_DEG
        )
        kinds = ", ".join(advice.kind for advice in one.foreseen.advice) or "-"
        print(
            f"| {one.name} | {side} | {one.foreseen.u_deg:.4f} | {one.stated_deg:.4f} | {one.ratio:.2f} | "
            f"{one.foreseen.expanded_deg:.4f}, {one.expanded_deg:.4f} "
            f"| {one.error_deg:.4f} | {one.n_turns} of {len(TURNS)} | {verdicts} | {kinds} |",
            flush=True,
        )
    near = sum(1.0 / SURE <= one.ratio <= SURE for one in outcomes)
    right = sum(one.verdict_is_right(want) for one in outcomes for want in WANTED_DEG)
    n_verdicts = len(outcomes) * len(WANTED_DEG)
    print(f"\n{near} of {len(outcomes)} within a factor {SURE:g}; {right} of {n_verdicts} verdicts right")


if __name__ == "__main__":
    main()
