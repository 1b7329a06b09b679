"""How often the stated intervals hold the truth: ``python -m bench.coverage [--trials 2000] [--n 6 12 24 48]``.

Simulated trials of known truth, for a grid of numbers of turns, laws of scatter, with and without dead band and strays.
The whole chain runs each time: model choice, strays, intervals. A stray is a turn that falls a fifth short of itself.
Printed: per cent of 95 % intervals that hold the truth, and how long a fit of 500 turns takes.
"""

from __future__ import annotations

import argparse
import itertools
import time
from collections import defaultdict

import numpy as np
from scipy import stats

from calib.command import command_for
from calib.errors import CalibError
from calib.fit import fit_turns
from calib.landing import closure, hit_rate, tolerance_band
from calib.scatter import LAWS
from calib.turns import Turns, reversals

GAINS = {1.0: 0.483, -1.0: 0.477}
BAND_WHEEL_DEG = 7.0
SCATTER_DEG = 0.5  # of a turn of 90 degrees
U_DEG = 0.02
WANTED_DEG = 90.0
TOLERANCE_DEG = 1.0
KINDS = ("gain", "dead band", "command", "prediction", "tolerance", "repeatab.", "difference", "hit rate", "closure")
SIZES = {6: (190.0,), 12: (95.0, 190.0, 380.0), 24: (95.0, 190.0, 380.0), 48: (95.0, 190.0, 380.0)}


def commands(rng: np.random.Generator, n: int) -> np.ndarray:
    """Return commands in which directions, reversals and sizes are balanced as far as n allows, after a first one."""
    side = np.resize([1.0, 1.0, -1.0, -1.0], n + 1)
    size = np.concatenate([rng.permutation(np.resize(SIZES[n], n)), SIZES[n][-1:]])
    return side * size


def simulated(rng: np.random.Generator, n: int, law: str, band: bool, strays: bool) -> Turns:
    wheel = commands(rng, n)
    side, state = np.sign(wheel), reversals(wheel, slack_known=np.arange(n + 1) > 0)
    gain = np.where(side > 0.0, GAINS[1.0], GAINS[-1.0])
    size = gain * (np.abs(wheel) - band * BAND_WHEEL_DEG * np.nan_to_num(state, nan=1.0))
    noise = SCATTER_DEG * (np.abs(wheel) * 0.48 / 90.0) ** LAWS[law]
    heading = size + noise * rng.normal(size=n + 1) + U_DEG * rng.normal(size=n + 1)
    if strays:
        far = 1 + rng.choice(n, max(1, n // 12), replace=False)
        heading[far] -= 0.2 * size[far]
    return Turns(wheel_deg=wheel, heading_deg=side * heading, u_deg=np.full(n + 1, U_DEG), reversed_=state)


def judged(turns: Turns, law: str, band: bool, rng: np.random.Generator) -> dict[str, bool]:
    """Return for each kind of interval whether it holds the truth."""
    fit = fit_turns(turns)
    mean = 0.5 * (GAINS[1.0] + GAINS[-1.0])
    held = {"gain": within(fit.gain(1.0), GAINS[1.0])}
    lost = BAND_WHEEL_DEG * band
    if fit.dead_band_if_any is not None:
        held["dead band"] = within(fit.dead_band_if_any, lost)
    if fit.difference_if_any is not None:
        held["difference"] = within(fit.difference_if_any, (GAINS[1.0] - GAINS[-1.0]) / mean)
    there = command_for(fit, WANTED_DEG, after_reversal=True)
    held["command"] = within(there.wheel_deg, WANTED_DEG / GAINS[1.0] + lost)
    mean_deg = GAINS[1.0] * (there.wheel_deg.value - lost)
    sd = SCATTER_DEG * (WANTED_DEG / 90.0) ** LAWS[law]
    held["prediction"] = there.low_deg <= mean_deg + sd * rng.normal() <= there.high_deg
    around = tolerance_band(there)
    share = np.diff(stats.norm.cdf([around.low_deg, around.high_deg], mean_deg, sd))[0]
    held["tolerance"] = bool(share >= 0.95)
    held["repeatab."] = within(fit.repeatability_deg(), SCATTER_DEG * (fit.size_deg / 90.0) ** LAWS[law])
    hits = np.diff(stats.norm.cdf([WANTED_DEG - TOLERANCE_DEG, WANTED_DEG + TOLERANCE_DEG], mean_deg, sd))[0]
    held["hit rate"] = within(hit_rate(there, TOLERANCE_DEG), hits)
    after = closure(there, 4)
    error = 4.0 * (mean_deg - WANTED_DEG) + 2.0 * sd * rng.normal()
    held["closure"] = after.low_deg <= error <= after.high_deg
    return held


def within(one, truth: float) -> bool:
    return bool(one.low <= truth <= one.high)


def cell(n: int, law: str, band: bool, strays: bool, trials: int) -> tuple[dict[str, float], int]:
    counts: dict[str, list[bool]] = defaultdict(list)
    refused = 0
    for trial in range(trials):
        rng = np.random.default_rng([trial, n, list(LAWS).index(law), band, strays])
        turns = simulated(rng, n, law, band, strays)
        try:
            for kind, held in judged(turns, law, band, rng).items():
                counts[kind].append(held)
        except CalibError:
            refused += 1
    return {kind: 100.0 * float(np.mean(counts[kind])) for kind in KINDS if counts[kind]}, refused


def fit_time_s(n: int = 500) -> float:
    """Return the least processor time of three fits, strays and all."""
    times = []
    for trial in range(3):
        turns = simulated(np.random.default_rng(trial), 48, "proportional", True, True)
        many = turns.take(np.resize(np.arange(1, len(turns)), n))
        start = time.process_time()
        fit_turns(many)
        times.append(time.process_time() - start)
    return min(times)


def main() -> None:
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--trials", type=int, default=2000)
    parser.add_argument("--n", type=int, nargs="*", default=[6, 12, 24, 48])
    given = parser.parse_args()
    print(f"{given.trials} trials a line; 95 % intervals; +- {196 * np.sqrt(0.05 * 0.95 / given.trials):.1f} by chance")
    print(f"a fit of 500 turns takes {fit_time_s():.2f} s of processor time")
    print("   n law           band stray " + " ".join(f"{kind:>10}" for kind in KINDS) + "  refused")
    for n, law, band, strays in itertools.product(given.n, LAWS, (False, True), (False, True)):
        start = time.monotonic()
        found, refused = cell(n, law, band, strays, given.trials)
        cells = " ".join(f"{found[kind]:10.1f}" if kind in found else " " * 10 for kind in KINDS)
        tail = f"{refused:7d} {time.monotonic() - start:5.0f} s"
        print(f"{n:4d} {law:12}  {'yes' if band else 'no':4} {'yes' if strays else 'no':5} {cells} {tail}", flush=True)


if __name__ == "__main__":
    main()
