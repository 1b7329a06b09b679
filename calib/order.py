"""An order of commands in which direction, reversal, size and drift can be told apart.

A block holds every combination of direction, size and start (along or against the turn before) exactly once: a closed
walk between the two directions that takes each change of direction, and each keeping of it, once for each size. Blocks
follow on one another, so that a drift over them meets all combinations alike. One turn comes before the first block,
since nothing is known of the slack that it starts with.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from calib.errors import CalibError
from calib.turns import reversals

FloatArray = NDArray[np.float64]

TRIES = 40
"""Orders drawn; the one that tells direction, size, start and drift apart best is kept (D-optimality)."""
MANY = 100
"""From so many blocks on, chance alone sees to that."""
QUANTITIES = ("gain counter-clockwise", "gain clockwise", "lost at a reversal", "drift", "offset")


@dataclass(frozen=True, eq=False, kw_only=True, slots=True)
class Order:
    """Commands in the order to drive.

    Parameters
    ----------
    wheel_deg : ndarray, shape (N,)
        The first comes before the blocks.
    block : tuple of int
        Block of each, from 1; 0 for the first.
    seed : int
    """

    wheel_deg: FloatArray
    block: tuple[int, ...]
    seed: int

    @property
    def reversed_(self) -> FloatArray:
        """1 for a start against the turn before, 0 for one along it, NaN for the first."""
        return reversals(self.wheel_deg, slack_known=np.arange(len(self.wheel_deg)) > 0)


@dataclass(frozen=True, kw_only=True, slots=True)
class Merit:
    """What an order is worth against another with the same turns.

    Parameters
    ----------
    u_planned, u_other : tuple of float
        Standard uncertainties of `QUANTITIES`, in units of one turn's scatter, at the largest size; infinite where the
        order cannot tell the quantity. The offset is absent where there is one size.
    d_efficiency : float
        How many times as many turns the other order would need for as small an ellipsoid of all; infinite where it
        cannot tell them.
    """

    u_planned: tuple[float, ...]
    u_other: tuple[float, ...]
    d_efficiency: float


def balanced_order(sizes_wheel_deg: Sequence[float], blocks: int, seed: int = 0) -> Order:
    """Return blocks in which each direction, size and start occurs once, after one turn before them.

    Parameters
    ----------
    sizes_wheel_deg : sequence of float
        Different sizes, above 0.
    blocks : int
        Repeats of each combination.
    seed : int
        The same seed gives the same order.
    """
    sizes = np.array(sorted(set(sizes_wheel_deg)), dtype=float)
    if len(sizes) == 0 or not np.all(np.isfinite(sizes) & (sizes > 0.0)):
        raise ValueError(f"sizes {list(sizes_wheel_deg)}; accepted: wheel degrees above 0")
    if blocks < 1:
        raise ValueError(f"{blocks} blocks; accepted: 1 or more")
    rng = np.random.default_rng(seed)
    home = float(rng.choice([-1.0, 1.0]))
    first = home * float(rng.choice(sizes))
    drawn = [
        np.concatenate([[first], *(_block(rng, sizes, home) for _ in range(blocks))])
        for _ in range(TRIES if blocks < MANY else 1)
    ]
    block = np.repeat(np.arange(blocks + 1), [1, *([4 * len(sizes)] * blocks)])
    return Order(wheel_deg=max(drawn, key=_information), block=tuple(block.tolist()), seed=seed)


def _block(rng: np.random.Generator, sizes: FloatArray, home: float) -> FloatArray:
    """Return one random closed walk from and to the home direction."""
    k = len(sizes)
    side = []
    at_home = rng.multinomial(k, np.full(k + 1, 1.0 / (k + 1)))
    away = rng.multinomial(k, np.full(k, 1.0 / k))
    for n in range(k):
        side.extend([home] * at_home[n] + [-home] * (1 + away[n]) + [home])
    side.extend([home] * at_home[k])
    walk = np.array(side)
    turned = np.append(home, walk[:-1]) != walk
    wheel = np.zeros(len(walk))
    for direction in (home, -home):
        for back in (False, True):
            wheel[(walk == direction) & (turned == back)] = direction * rng.permutation(sizes)
    return wheel


def _information(wheel: FloatArray) -> float:
    """Return the logarithm of the determinant of what the turns tell of all quantities, a drift among them."""
    design = _design(wheel)
    return float(np.linalg.slogdet(design.T @ design)[1])


def naive_order(sizes_wheel_deg: Sequence[float], n_turns: int) -> FloatArray:
    """Return as many turns in the order that suggests itself: each command again and again, then the next."""
    commands = [side * size for side in (1.0, -1.0) for size in sorted(set(sizes_wheel_deg))]
    counts = [len(part) for part in np.array_split(np.arange(n_turns), len(commands))]
    return np.repeat(commands, counts).astype(float)


def merit(planned: FloatArray, other: FloatArray) -> Merit:
    """Return what an order is worth against another."""
    first, second = _design(planned), _design(other)
    n_columns = first.shape[1]
    n_first, n_second = (_information(one) - n_columns * math.log(len(one) - 1) for one in (planned, other))
    told = np.linalg.matrix_rank(second) == n_columns
    if np.linalg.matrix_rank(first) < n_columns:
        raise CalibError("this order cannot tell direction, reversal and drift apart; plan more blocks")
    return Merit(
        u_planned=_uncertainties(first),
        u_other=_uncertainties(second),
        d_efficiency=math.exp((n_first - n_second) / n_columns) if told else math.inf,
    )


def _design(wheel: FloatArray) -> FloatArray:
    """Return the columns of `QUANTITIES` for the turns after the first, at the scale of the largest size."""
    state = reversals(wheel, slack_known=np.arange(len(wheel)) > 0)[1:]
    used = wheel[1:]
    size, side = np.abs(used) / np.abs(wheel).max(), np.sign(used)
    time = np.linspace(-0.5, 0.5, len(used))
    columns = [np.where(side > 0.0, size, 0.0), np.where(side < 0.0, size, 0.0), -state, time * size]
    if np.ptp(size) > 0.0:
        columns.append(side)
    return np.column_stack(columns)


def _uncertainties(design: FloatArray) -> tuple[float, ...]:
    """Return the standard uncertainty of each coefficient, infinite where it cannot be told."""
    _, size, right = np.linalg.svd(design, full_matrices=True)
    kept = np.append(size, np.zeros(right.shape[0] - len(size))) > 1e-9 * size[0]
    inverse = right[kept].T / size[: kept.sum()]
    free = np.abs(right[~kept]).max(axis=0, initial=0.0) if np.any(~kept) else np.zeros(right.shape[0])
    u = np.sqrt(np.sum(inverse**2, axis=1))
    return tuple(float(value) if loose < 1e-6 else math.inf for value, loose in zip(u, free, strict=True))
