"""Many questions asked of the same turns: Holm's adjustment keeps the chance of any false alarm at the level."""

from __future__ import annotations

import numpy as np
from numpy.typing import ArrayLike, NDArray


def holm(p_values: ArrayLike) -> NDArray[np.float64]:
    """Return p-values adjusted so that each may be held against the level of the whole family.

    Parameters
    ----------
    p_values : array_like, shape (K,)
        NaN for a question that could not be asked; it stays NaN and does not count.

    References
    ----------
    Holm (1979), A simple sequentially rejective multiple test procedure, Scand. J. Statist. 6, 65-70.
    """
    p = np.array(p_values, dtype=float)
    asked = np.flatnonzero(np.isfinite(p))
    order = asked[np.argsort(p[asked], kind="stable")]
    steps = np.arange(len(order), 0, -1)
    p[order] = np.minimum(np.maximum.accumulate(p[order] * steps), 1.0)
    return p
