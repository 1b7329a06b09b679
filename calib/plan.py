"""What to drive: how many repeats for the certainty that is wanted, in which order, and what is still missing."""

from __future__ import annotations

from collections import Counter
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from calib.errors import CalibError
from calib.fit import CONFIDENCE
from calib.order import Merit, Order, balanced_order, merit, naive_order
from calib.sample_size import (
    repeats_for_difference,
    repeats_for_equivalence,
    repeats_for_hit_rate,
    repeats_for_mean,
    repeats_for_spread,
    repeats_to_detect,
)
from calib.turns import Turns

DEFAULT_REPEATS = 4
MOST_TURNS = 5000


@dataclass(frozen=True, kw_only=True, slots=True)
class Wanted:
    """The certainty that is wanted; None for what is not asked.

    Parameters
    ----------
    mean_deg : float or None
        Half-width of the interval of each command's mean.
    spread_share : float or None
        Half-width of the interval of the repeatability, as a share of it.
    difference_deg : float or None
        Half-width of the interval of a difference from another surface, driven as often.
    detect_deg : float or None
        Difference from another surface that is to be seen, with chance 0.8.
    margin_deg : float or None
        Margin within which another surface is to be shown the same, with chance 0.8, if it is.
    hit_rate : tuple of float or None
        Half-width of the interval of a hit rate, and the rate that is expected.
    """

    mean_deg: float | None = None
    spread_share: float | None = None
    difference_deg: float | None = None
    detect_deg: float | None = None
    margin_deg: float | None = None
    hit_rate: tuple[float, float] | None = None

    @property
    def needs_scatter(self) -> bool:
        """Whether the expected scatter of single turns must be known."""
        return any(one is not None for one in (self.mean_deg, self.difference_deg, self.detect_deg, self.margin_deg))


@dataclass(frozen=True, kw_only=True, slots=True)
class Need:
    """One wish and the repeats of each command that it takes."""

    what: str
    repeats: int


@dataclass(frozen=True, eq=False, kw_only=True, slots=True)
class Plan:
    """What to drive.

    Parameters
    ----------
    sizes_wheel_deg : tuple of float
    needs : tuple of Need
    repeats : int
        Of each combination of direction, size and start.
    order : Order
    merit : Merit
        Against the naive order with as many turns.
    """

    sizes_wheel_deg: tuple[float, ...]
    needs: tuple[Need, ...]
    repeats: int
    order: Order
    merit: Merit


@dataclass(frozen=True, kw_only=True, slots=True)
class Missing:
    """One combination with the repeats it has and still needs."""

    wheel_deg: float
    after_reversal: bool
    have: int
    missing: int


def needs_of(
    wanted: Wanted, n_sizes: int, scatter_deg: float | None = None, *, confidence: float = CONFIDENCE
) -> tuple[Need, ...]:
    """Return how many repeats of each combination of direction, size and start every wish takes.

    Parameters
    ----------
    wanted : Wanted
    n_sizes : int
    scatter_deg : float or None
        Expected standard deviation of single turns.
    confidence : float

    Raises
    ------
    CalibError
        If the scatter is needed and not given, or a wish takes more repeats than anybody drives.
    """
    if wanted.needs_scatter and scatter_deg is None:
        raise CalibError("the scatter of single turns must be known to say how many repeats a width in degrees takes")
    sd, alike, out = scatter_deg or 0.0, 4 * n_sizes, []
    if wanted.mean_deg is not None:
        n = repeats_for_mean(wanted.mean_deg, sd, confidence=confidence, commands=alike)
        out.append(Need(what=f"mean of each command to ±{wanted.mean_deg:g} deg", repeats=n))
    if wanted.spread_share is not None:
        n = repeats_for_spread(wanted.spread_share, confidence=confidence, commands=alike)
        out.append(Need(what=f"repeatability to ±{wanted.spread_share:.0%} of itself", repeats=n))
    if wanted.difference_deg is not None:
        n = repeats_for_difference(wanted.difference_deg, sd, sd, confidence=confidence, commands=alike)
        out.append(Need(what=f"difference from another surface to ±{wanted.difference_deg:g} deg", repeats=n))
    if wanted.detect_deg is not None:
        n = repeats_to_detect(wanted.detect_deg, sd, level=1.0 - confidence)
        out.append(Need(what=f"a difference of {wanted.detect_deg:g} deg seen with chance 0.8", repeats=n))
    if wanted.margin_deg is not None:
        n = repeats_for_equivalence(wanted.margin_deg, sd, level=1.0 - confidence)
        out.append(Need(what=f"the same within {wanted.margin_deg:g} deg shown with chance 0.8", repeats=n))
    if wanted.hit_rate is not None:
        half, rate = wanted.hit_rate
        n = repeats_for_hit_rate(half, rate, confidence=confidence)
        out.append(Need(what=f"hit rate of each command near {rate:.0%} to ±{half:.0%}", repeats=n))
    return tuple(out)


def make_plan(
    sizes_wheel_deg: Sequence[float], needs: Sequence[Need] = (), *, repeats: int | None = None, seed: int = 0
) -> Plan:
    """Return what to drive for all needs.

    Parameters
    ----------
    sizes_wheel_deg : sequence of float
    needs : sequence of Need
    repeats : int, optional
        Instead of the most that the needs take; `DEFAULT_REPEATS` without either.
    seed : int

    Raises
    ------
    CalibError
        If the plan would be too long to drive.
    """
    sizes = tuple(sorted(set(map(abs, sizes_wheel_deg))))
    each = repeats if repeats is not None else max((need.repeats for need in needs), default=DEFAULT_REPEATS)
    n_turns = 1 + 4 * len(sizes) * each
    if n_turns > MOST_TURNS:
        raise CalibError(
            f"{each} repeats of {4 * len(sizes)} combinations are {n_turns} turns, more than {MOST_TURNS}; "
            "ask for less certainty, or for fewer sizes"
        )
    order = balanced_order(sizes, each, seed)
    return Plan(
        sizes_wheel_deg=sizes,
        needs=tuple(needs),
        repeats=each,
        order=order,
        merit=merit(order.wheel_deg, naive_order(sizes, n_turns)),
    )


def missing_after(turns: Turns, sizes_wheel_deg: Sequence[float], repeats: int) -> tuple[Missing, ...]:
    """Return for every combination how often it was driven, and how many repeats are missing."""
    pairs = zip(turns.wheel_deg.tolist(), turns.reversed_.tolist(), strict=True)
    seen = Counter((wheel, bool(state)) for wheel, state in pairs if np.isfinite(state))
    sizes = sorted(set(map(abs, sizes_wheel_deg)))
    keys = [(side * size, back) for size in sizes for side in (1.0, -1.0) for back in (False, True)]
    return tuple(
        Missing(wheel_deg=wheel, after_reversal=back, have=have, missing=max(repeats - have, 0))
        for (wheel, back), have in ((key, seen[key]) for key in keys)
    )
