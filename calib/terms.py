"""Whether further terms belong in a fitted relation: the F test of nested models."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy import special

from calib.errors import NotEnoughTurns, NotIdentified
from calib.linear import TINY

FloatArray = NDArray[np.float64]

LEAST_LEFT = 0.02
"""A term must vary by at least this share of itself after the rest is fitted, or the turns cannot tell it."""
FEWEST_DOF = 2


class NotVaried(NotIdentified):
    """Terms that the turns cannot tell from the relation or from each other."""


@dataclass(frozen=True, eq=False, kw_only=True, slots=True)
class AddedTerms:
    """Terms added to a relation, tested together.

    Parameters
    ----------
    coefficients : ndarray, shape (Q,)
    cov : ndarray, shape (Q, Q)
    f, p_value : float
        Test that all are 0.
    dof_left : int
        Degrees of freedom of the scatter about the relation with the terms.
    """

    coefficients: FloatArray
    cov: FloatArray
    f: float
    p_value: float
    dof_left: int


def added_terms(
    base: FloatArray, extra: FloatArray, data: FloatArray, weight: FloatArray, *, least_left: float = LEAST_LEFT
) -> AddedTerms:
    """Fit terms beside a relation and test them together.

    Parameters
    ----------
    base : ndarray, shape (N, P)
        Columns of the relation as it is; they may depend on each other.
    extra : ndarray, shape (N, Q)
        Columns of the terms.
    data, weight : ndarray, shape (N,)
    least_left : float
        Share of its size that every combination of the terms must keep beside the relation.

    Raises
    ------
    NotVaried
        If the terms cannot be told from the relation or from each other.
    NotIdentified
        If the turns do not scatter.
    NotEnoughTurns
    """
    root = np.sqrt(weight)
    q = spanned(base * root[:, None])
    n, n_base, n_extra = len(data), q.shape[1], extra.shape[1]
    if n - n_base - n_extra < FEWEST_DOF:
        needed = n_base + n_extra + FEWEST_DOF
        raise NotEnoughTurns(f"{n} turns where {needed} are needed", n_seen=n, n_needed=needed)
    scaled, size = _scaled(extra * root[:, None])
    free = scaled - q @ (q.T @ scaled)
    left, kept, right = np.linalg.svd(free, full_matrices=False)
    if not kept.min() > least_left:
        raise NotVaried("it was not varied enough beside the commands")
    before = data * root - q @ (q.T @ (data * root))
    along = left.T @ before
    after = before - left @ along
    dof = n - n_base - n_extra
    variance = float(after @ after) / dof
    if variance <= (1e-12 * float(np.abs(data * root).max())) ** 2:
        raise NotIdentified("the turns do not scatter about the relation at all")
    f = float(along @ along) / n_extra / variance
    shape = right.T / kept
    return AddedTerms(
        coefficients=(shape @ along) / size,
        cov=variance * (shape @ shape.T) / np.outer(size, size),
        f=f,
        p_value=float(special.fdtrc(n_extra, dof, f)),
        dof_left=dof,
    )


def spanned(columns: FloatArray) -> FloatArray:
    """Return orthonormal directions that columns span, each taken at its own scale; fewer than columns if dependent."""
    left, size, _ = np.linalg.svd(columns / np.maximum(np.linalg.norm(columns, axis=0), TINY), full_matrices=False)
    return np.asarray(left[:, size > 1e-9 * size[0]])


def _scaled(columns: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Return columns of length 1, and what their lengths were; the same for all, so that none is lent weight."""
    size = max(float(np.linalg.norm(columns, axis=0).max()), TINY)
    return columns / size, np.full(columns.shape[1], size)
