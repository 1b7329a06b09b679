"""Charts of single values in time: individuals and moving ranges, with limits and signals.

The spread is judged from what neighbours differ by, so a slow change does not widen the limits that should show it.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike, NDArray

from calib.errors import NotEnoughTurns

FloatArray = NDArray[np.float64]

D2 = 1.1283791670955126
"""Mean range of two standard normal values, 2 / sqrt(pi) (ISO 7870-2, table of d2)."""

D4 = 3.2665
"""Upper limit of a moving range of two over its mean (ISO 7870-2, table of D4: 3.267)."""

RUN = 7
"""Values in a row on one side of the centre, or rising or falling all along, that make a signal (ISO 7870-2:2013; from
memory)."""

FEWEST = 3


@dataclass(frozen=True, kw_only=True, slots=True)
class Signal:
    """A value that does not look like the others.

    Parameters
    ----------
    index : int
        The value at which the signal is complete.
    kind : str
        ``beyond the limits``, ``one side``, ``rising``, ``falling`` or ``jump``.
    """

    index: int
    kind: str


@dataclass(frozen=True, eq=False, kw_only=True, slots=True)
class Chart:
    """A chart of N values.

    Parameters
    ----------
    values : ndarray, shape (N,)
    centre, low, high : float
    moving_range : ndarray, shape (N - 1,)
    mean_range, range_high : float
    signals : tuple of Signal
        In order of the value.
    """

    values: FloatArray
    centre: float
    low: float
    high: float
    moving_range: FloatArray
    mean_range: float
    range_high: float
    signals: tuple[Signal, ...]


def individuals_chart(values: ArrayLike) -> Chart:
    """Return the chart of single values in order of time.

    Parameters
    ----------
    values : array_like, shape (N,)

    Raises
    ------
    NotEnoughTurns
        With fewer than three values.

    References
    ----------
    ISO 7870-2:2013, Shewhart control charts; NIST/SEMATECH e-Handbook of Statistical Methods, 6.3.2.2.
    """
    data = np.asarray(values, dtype=float)
    if len(data) < FEWEST:
        raise NotEnoughTurns(f"{len(data)} trials; a chart needs at least {FEWEST}", n_seen=len(data), n_needed=FEWEST)
    ranges = np.abs(np.diff(data))
    centre, mean_range = float(data.mean()), float(ranges.mean())
    half = 3.0 * mean_range / D2
    found = [
        *(Signal(index=int(k), kind="beyond the limits") for k in np.flatnonzero(np.abs(data - centre) > half)),
        *_runs(np.sign(data - centre), {1.0: "one side", -1.0: "one side"}, RUN),
        *_runs(np.append(0.0, np.sign(np.diff(data))), {1.0: "rising", -1.0: "falling"}, RUN - 1),
        *(Signal(index=int(k) + 1, kind="jump") for k in np.flatnonzero(ranges > D4 * mean_range)),
    ]
    return Chart(
        values=data,
        centre=centre,
        low=centre - half,
        high=centre + half,
        moving_range=ranges,
        mean_range=mean_range,
        range_high=D4 * mean_range,
        signals=tuple(sorted(found, key=lambda one: (one.index, one.kind))),
    )


def _runs(side: FloatArray, names: dict[float, str], length: int) -> list[Signal]:
    """Return a signal at the `length`-th equal sign in a row, and not again until the run is broken."""
    found, count = [], 0
    for k, now in enumerate(side.tolist()):
        count = count + 1 if k and now == side[k - 1] else 1
        if count == length and now in names:
            found.append(Signal(index=k, kind=names[now]))
    return found
