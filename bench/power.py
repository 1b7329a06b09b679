"""How often the tests find what is there, and what is not: ``python -m bench.power [--trials 2000]``.

Simulated trials of known truth; the whole chain runs each time: order of commands, fit with strays and model choice,
judgement or comparison. Printed: per cent of trials in which each test speaks at 5 %, beside what it should be: 5 where
nothing is there; where something is, the power of the best test that knows all but its size (F for grain, place and
factor; Student's for a drift, of which Mann and Kendall's test reaches about 95 % in efficiency).
"""

from __future__ import annotations

import argparse
import time
from collections import defaultdict

import numpy as np
from scipy import stats

from calib.about_fit import about_fit
from calib.compare import DIFFERENT, SAME, compare_tables
from calib.consistency import judge
from calib.equivalence import chance_to_show
from calib.errors import CalibError
from calib.fit import fit_turns
from calib.grain import grain_columns
from calib.order import balanced_order
from calib.sample_size import detection_power
from calib.table import TurnTable
from calib.turns import Turns, reversals

GAIN, BAND_WHEEL_DEG, SCATTER_DEG, U_DEG = 0.48, 7.0, 0.5, 0.02
ORDERS = [balanced_order([190.0], 6, seed).wheel_deg for seed in range(10)]
EFFECTS = {
    "nothing": {},
    "drift of 0.04 deg a turn": {"drift": 0.04},
    "grain of 1 %": {"grain": 0.01},
    "slope of 1.5 % a metre": {"slope": 0.015},
    "load that takes 0.5 %": {"load": -0.005},
}
CHECKS = ("drift", "neighbours", "grain", "slope of place", "curve of place", "direction", "relation", "factor load")
FINDS = {"drift": "drift", "grain": "grain", "slope": "slope of place", "load": "factor load"}


def simulated(rng: np.random.Generator, *, gain=GAIN, scatter=SCATTER_DEG, runs=1, between=0.0, **effect) -> TurnTable:
    """Return a table of turns with an effect, and keep no other than chance."""
    parts = [_run(rng, gain, scatter, rng.normal(0.0, between) if between else 0.0, effect) for _ in range(runs)]
    wheel, heading, state, start, x, y, load = (np.concatenate(column) for column in zip(*parts, strict=True))
    n = len(wheel)
    return TurnTable(
        turns=Turns(wheel_deg=wheel, heading_deg=heading, u_deg=np.full(n, U_DEG), reversed_=state),
        run=tuple(np.repeat([f"run {k}" for k in range(runs)], n // runs)),
        number=np.tile(np.arange(n // runs, dtype=float), runs),
        frame=("",) * n,
        start_heading_deg=start,
        x_mm=x,
        y_mm=y,
        wanted_deg=np.full(n, np.nan),
        factors={"load": tuple(np.where(load, "full", "empty").tolist())},
    )


def _run(rng: np.random.Generator, gain: float, scatter: float, shift: float, effect: dict) -> tuple[np.ndarray, ...]:
    wheel = ORDERS[rng.integers(len(ORDERS))]
    n, side = len(wheel), np.sign(wheel)
    state = reversals(wheel, slack_known=np.arange(n) > 0)
    x, y, load = rng.uniform(-400, 400, n), rng.uniform(-400, 400, n), rng.permutation(np.arange(n) % 2)
    size = gain * (np.abs(wheel) - BAND_WHEEL_DEG * np.nan_to_num(state, nan=0.0))
    size = size * (1.0 + effect.get("slope", 0.0) * x / 1000.0 + effect.get("load", 0.0) * load)
    size = size + shift + effect.get("drift", 0.0) * np.arange(n) + scatter * rng.normal(size=n)
    change, start, heading = side * size, np.zeros(n), rng.uniform(0.0, 360.0)
    for k in range(n):
        start[k] = heading
        change[k] += effect.get("grain", 0.0) * grain_columns([heading], [change[k]])[0, 0]
        heading += change[k]
    return wheel, change + U_DEG * rng.normal(size=n), state, start, x, y, load


def best_power(table: TurnTable, effect: dict) -> float:
    """Return the power of the test that knows the form of the effect, for this trial's design."""
    (name, size), = effect.items()
    about = about_fit(table, fit_turns(table.turns, keep_strays=True))
    used, expected = about.table, about.expected_deg
    load = np.array([one == "full" for one in used.factors["load"]], dtype=float)
    added = {
        "drift": lambda: used.number,
        "grain": lambda: grain_columns(used.start_heading_deg, expected * used.turns.side)[:, 0] * used.turns.side,
        "slope": lambda: expected * used.x_mm / 1000.0,
        "load": lambda: expected * load,
    }[name]()
    basis, _ = np.linalg.qr(about.design)
    left = size * (added - basis @ (basis.T @ added))
    n_terms = {"drift": 1, "load": 1}.get(name, 2)
    dof = len(used) - about.design.shape[1] - n_terms
    away = float(left @ left) / (SCATTER_DEG**2 + U_DEG**2)
    return float(stats.ncf.sf(stats.f.isf(0.05, n_terms, dof), n_terms, dof, away))


def consistency(trials: int) -> None:
    print(f"Judging one trial of {len(ORDERS[0])} turns, each test by itself at 5 %, {trials} trials a line")
    print(f"{'what is there':26}" + "".join(f"{name:>15}" for name in CHECKS))
    for label, effect in EFFECTS.items():
        start, found, family, best = time.monotonic(), defaultdict(list), [], []
        for trial in range(trials):
            table = simulated(np.random.default_rng([trial, 1]), **effect)
            judged = judge(table, fit_turns(table.turns))
            for check in judged.checks:
                found[check.name].append(check.p_value <= 0.05)
            family.append(bool(judged.seen()))
            if effect and trial < 50:
                best.append(best_power(table, effect))
        cells = [f"{100 * np.mean(found[name]):15.1f}" if found[name] else " " * 15 for name in CHECKS]
        print(f"{label:26}" + "".join(cells) + f"{time.monotonic() - start:6.0f} s", flush=True)
        if effect:
            (name,) = effect
            print(f"{'':26}best possible for {FINDS[name]}: {100 * np.mean(best):.1f}")
        else:
            print(f"{'':26}nominal 5 each; any of them after Holm: {100 * np.mean(family):.1f} (nominal at most 5)")


def between_runs(trials: int) -> None:
    print(f"\nThree runs of {len(ORDERS[0])} turns each, test between runs, {trials} trials a line")
    for between in (0.0, 0.25):
        found = []
        for trial in range(trials):
            table = simulated(np.random.default_rng([trial, 2]), runs=3, between=between)
            judged = judge(table, fit_turns(table.turns))
            found.append(judged.runs.p_value <= 0.05)
        each = judged.runs.turns_a_run
        f = stats.f.isf(0.05, 2, judged.runs.dof_within) / (1 + each * between**2 / (SCATTER_DEG**2 + U_DEG**2))
        expected = 100 * stats.f.sf(f, 2, judged.runs.dof_within)
        print(f"  between runs {between:4.2f} deg: {100 * np.mean(found):5.1f}   nominal {expected:5.1f}", flush=True)


def comparison(trials: int) -> None:
    n = len(ORDERS[0])
    print(f"\nTwo floors, {n} turns on each, compared at +90 deg, margin 1 deg, {trials} trials a line")
    print("  true difference   spread ratio   'different'  nominal   'same'  nominal   F test  nominal   Brown-F.")
    for apart, ratio in ((0.0, 1.0), (0.4, 1.0), (1.0, 1.0), (0.0, 2.0)):
        start, verdicts, different, f_test, bf_test, u2 = time.monotonic(), [], [], [], [], []
        for trial in range(trials):
            rng = np.random.default_rng([trial, 3])
            first = simulated(rng)
            second = simulated(rng, gain=GAIN * (1.0 + apart / 90.0), scatter=ratio * SCATTER_DEG)
            try:
                found = compare_tables([("a", first), ("b", second)], wanted_deg=[90.0])
            except CalibError:
                continue
            (pair,), (spread,) = found.pairs, found.spreads
            verdicts.append(pair.verdict)
            different.append(pair.p_different <= 0.05)
            f_test.append(spread.p_f <= 0.05)
            bf_test.append(spread.p_brown_forsythe <= 0.05)
            u2.append([pair.heading_deg.u**2, pair.heading_dof])
        u, dof = np.sqrt(np.mean([one[0] for one in u2])), np.mean([one[1] for one in u2])
        k = found.groups[0].fit.dof
        limits = np.array([stats.f.ppf(0.025, k, k), stats.f.isf(0.025, k, k)]) / ratio**2
        power_f = 100 * (stats.f.cdf(limits[0], k, k) + stats.f.sf(limits[1], k, k))
        print(
            f"  {apart:11.2f} deg {ratio:14.1f}"
            f" {100 * np.mean(different):13.1f} {100 * detection_power(apart, u, dof):8.1f}"
            f" {100 * np.mean([v == SAME for v in verdicts]):8.1f} {100 * chance_to_show(apart, u, dof, 1.0):8.1f}"
            f" {100 * np.mean(f_test):8.1f} {power_f:8.1f} {100 * np.mean(bf_test):10.1f}"
            f" {time.monotonic() - start:5.0f} s",
            flush=True,
        )
    told = np.mean([verdict in (SAME, DIFFERENT) for verdict in verdicts])
    print(f"  told one way or the other in the last line: {100 * told:.1f} %")


def comparison_over_runs(trials: int) -> None:
    n = len(ORDERS[0])
    print(f"\nTwo floors that are alike, three runs of {n} turns on each, at +90 deg, {trials} trials a line")
    for between in (0.0, 0.25, 1.0):
        start, different = time.monotonic(), []
        for trial in range(trials):
            rng = np.random.default_rng([trial, 4])
            tables = [(name, simulated(rng, runs=3, between=between)) for name in ("a", "b")]
            (pair,) = compare_tables(tables, wanted_deg=[90.0]).pairs
            different.append(pair.p_different <= 0.05)
        share, seconds = 100 * np.mean(different), time.monotonic() - start
        print(f"  between runs {between:4.2f} deg: 'different' {share:5.1f} nominal 5{seconds:6.0f} s", flush=True)


def main() -> None:
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--trials", type=int, default=2000)
    given = parser.parse_args()
    print(f"+- {196 * np.sqrt(0.05 * 0.95 / given.trials):.1f} by chance at 5 %")
    consistency(given.trials)
    between_runs(given.trials)
    comparison(given.trials)
    comparison_over_runs(given.trials)


if __name__ == "__main__":
    main()
