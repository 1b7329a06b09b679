"""Weighted linear least squares with the covariance that belongs to it, by QR."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike, NDArray

from calib.errors import NotEnoughTurns, NotIdentified

FloatArray = NDArray[np.float64]

TINY = float(np.finfo(float).tiny)


@dataclass(frozen=True, eq=False, kw_only=True, slots=True)
class LinearFit:
    """A linear model with its coefficients' covariance.

    Parameters
    ----------
    coefficients : ndarray, shape (P,)
    unscaled_cov : ndarray, shape (P, P)
        Inverse of the weighted normal matrix: the covariance if the weights are true inverse variances.
    residual_sd : float
        Root of the weighted residual sum of squares over the degrees of freedom.
    dof : int
    residuals : ndarray, shape (N,)
        Unweighted.
    """

    coefficients: FloatArray
    unscaled_cov: FloatArray
    residual_sd: float
    dof: int
    residuals: FloatArray

    @property
    def cov(self) -> FloatArray:
        """Covariance scaled by the residual variance, shape (P, P)."""
        return self.unscaled_cov * self.residual_sd**2


def least_squares(design: ArrayLike, data: ArrayLike, weight: ArrayLike | None = None) -> LinearFit:
    """Fit ``data = design @ coefficients`` with weights.

    Parameters
    ----------
    design : array_like, shape (N, P)
    data : array_like, shape (N,)
    weight : array_like, shape (N,), optional
        Inverse variances up to a common factor; equal by default.

    Raises
    ------
    NotEnoughTurns
        If there are no degrees of freedom left.
    NotIdentified
        If columns of the design depend on each other.
    """
    matrix, values = np.asarray(design, dtype=float), np.asarray(data, dtype=float)
    n_rows, n_columns = matrix.shape
    if n_rows <= n_columns:
        raise NotEnoughTurns(
            f"{n_rows} usable turns for {n_columns} quantities; at least {n_columns + 1} are needed",
            n_seen=n_rows,
            n_needed=n_columns + 1,
        )
    root = np.sqrt(np.ones(n_rows) if weight is None else np.asarray(weight, dtype=float))
    size = np.maximum(np.abs(matrix).max(axis=0), TINY)
    q, r = np.linalg.qr(matrix / size * root[:, None])
    diagonal = np.abs(np.diag(r))
    if not diagonal.min() > 1e-11 * diagonal.max():
        raise NotIdentified("the turns do not tell the quantities of the model apart")
    inverse = np.linalg.inv(r)
    coefficients = np.linalg.solve(r, q.T @ (values * root))
    residuals = values - (matrix / size) @ coefficients
    dof = n_rows - n_columns
    return LinearFit(
        coefficients=coefficients / size,
        unscaled_cov=(inverse @ inverse.T) / np.outer(size, size),
        residual_sd=float(np.sqrt(np.sum((residuals * root) ** 2) / dof)),
        dof=dof,
        residuals=residuals,
    )
