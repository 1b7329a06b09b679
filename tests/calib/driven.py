"""Simulated trials of known truth, as tables of turns."""

import numpy as np

from calib.grain import grain_columns
from calib.order import balanced_order
from calib.table import TurnTable
from calib.turns import Turns, reversals


def driven(
    seed,
    *,
    wheel_deg=None,
    blocks=4,
    runs=1,
    gain=0.48,
    band_wheel_deg=7.0,
    scatter_deg=0.5,
    between_deg=0.0,
    drift_deg=0.0,
    grain=0.0,
    axis_deg=0.0,
    slope_per_m=0.0,
    factor=0.0,
    u_deg=0.02,
    frames=1,
    frame_turns_deg=0.0,
    factors=True,
):
    """Return a table of turns; effects in deg are for each turn, those of the gain are relative."""
    rng = np.random.default_rng(seed)
    parts = []
    for run in range(runs):
        wheel = np.array(wheel_deg) if wheel_deg is not None else balanced_order([150.0, 220.0], blocks, seed).wheel_deg
        parts.append(_run(rng, wheel, run, locals()))
    joined = {key: np.concatenate([part[key] for part in parts]) for key in parts[0]}
    turns = Turns(**{key: joined[key] for key in ("wheel_deg", "heading_deg", "u_deg", "reversed_")})
    return TurnTable(
        turns=turns,
        run=tuple(f"run {int(one)}" for one in joined["run"]),
        number=joined["number"],
        frame=tuple(f"frame {int(one) % frames}" for one in joined["run"]),
        start_heading_deg=joined["start"] + frame_turns_deg,
        x_mm=joined["x"],
        y_mm=joined["y"],
        wanted_deg=np.full(len(turns), np.nan),
        factors={"load": tuple("full" if one else "empty" for one in joined["load"])} if factors else {},
    )


def _run(rng, wheel, run, say):
    n, side = len(wheel), np.sign(wheel)
    state = reversals(wheel, slack_known=np.arange(n) > 0)
    where, load = rng.uniform(-400, 400, (n, 2)), rng.permutation(np.arange(n) % 2)
    size = say["gain"] * (np.abs(wheel) - say["band_wheel_deg"] * np.nan_to_num(state, nan=0.0))
    size = size * (1.0 + say["slope_per_m"] * where[:, 0] / 1000.0 + say["factor"] * load)
    change = side * (
        size
        + say["scatter_deg"] * rng.normal(size=n)
        + say["between_deg"] * rng.normal()
        + say["drift_deg"] * (np.arange(n) - 0.5 * n)
    )
    start, heading = np.zeros(n), rng.uniform(0.0, 360.0)
    for k in range(n):
        extra = grain_columns([heading], [change[k]])[0]
        double = 2.0 * np.radians(say["axis_deg"])
        change[k] += say["grain"] * float(extra @ [np.cos(double), np.sin(double)])
        start[k] = heading
        heading += change[k]
    return {
        "wheel_deg": wheel,
        "heading_deg": change + say["u_deg"] * rng.normal(size=n),
        "u_deg": np.full(n, say["u_deg"]),
        "reversed_": state,
        "run": np.full(n, run),
        "number": np.arange(n, dtype=float),
        "start": start,
        "x": where[:, 0],
        "y": where[:, 1],
        "load": load,
    }
