"""The scatter of many models under many laws, all searched at once.

Every model takes some of the same columns, so the normal equations of all are parts of one matrix, and the residual
likelihoods of all come from few operations on whole arrays.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from calib.linear import TINY

FloatArray = NDArray[np.float64]

GRID = 25
ROUNDS = 3
"""Grids of that many scatters, each inside the last, then a parabola."""


@dataclass(frozen=True, eq=False, kw_only=True, slots=True)
class Searched:
    """What was found for each of K fits.

    Parameters
    ----------
    scatter_deg : ndarray, shape (K,)
        With the greatest residual likelihood.
    log_likelihood : ndarray, shape (K,)
        At that scatter, with the greatest over coefficients.
    """

    scatter_deg: FloatArray
    log_likelihood: FloatArray


def search_scatter(
    columns: FloatArray, taken: NDArray[np.bool_], data: FloatArray, u: FloatArray, shape: FloatArray
) -> Searched:
    """Find the scatter of each fit by residual maximum likelihood (Patterson and Thompson 1971).

    Parameters
    ----------
    columns : ndarray, shape (N, P)
        All that any fit takes.
    taken : ndarray of bool, shape (K, P)
        Which of them each fit takes; they must be independent, and fewer than N.
    data, u : ndarray, shape (N,)
        Data and their standard uncertainties.
    shape : ndarray, shape (K, N)
        Variances of single turns under each fit's law, relative to one of typical size.
    """
    equations = _Equations(columns / np.maximum(np.abs(columns).max(axis=0), TINY), taken, data, 1.0 / shape)
    dof = len(data) - taken.sum(axis=1)
    scatter = np.sqrt(equations.squares(1.0 / shape[:, None, :])[0][:, 0] / dof)
    if np.any(u > 0.0):
        scatter = _best(equations, np.maximum(u, 1e-3 * float(u.max())) ** 2, shape, scatter)
        variance = np.maximum(u, 1e-3 * float(u.max())) ** 2 + scatter[:, None] ** 2 * shape
    else:
        variance = scatter[:, None] ** 2 * shape
    variance = np.maximum(variance, (1e-15 * max(float(np.abs(data).max()), 1e-100)) ** 2)
    squares, _ = equations.squares(1.0 / variance[:, None, :])
    log_likelihood = -0.5 * (np.sum(np.log(2.0 * math.pi * variance), axis=1) + squares[:, 0])
    return Searched(scatter_deg=scatter, log_likelihood=log_likelihood)


class _Equations:
    """Normal equations of all fits, about what each says with first weights, so that no digits are lost."""

    def __init__(
        self, columns: FloatArray, taken: NDArray[np.bool_], data: FloatArray, weight: FloatArray
    ) -> None:
        n, p = columns.shape
        self.columns, self.taken = columns, taken.astype(float)
        self.products = (columns[:, :, None] * columns[:, None, :]).reshape(n, p * p)
        self.left = np.broadcast_to(data, weight.shape)
        for _ in range(2):
            normal, right = self._of(weight[:, None, :])
            step = np.linalg.solve(normal, right[..., None])[:, 0, :, 0]
            self.left = self.left - step @ columns.T

    def _of(self, weight: FloatArray) -> tuple[FloatArray, FloatArray]:
        p, mask = self.columns.shape[1], self.taken
        normal = (weight @ self.products).reshape(*weight.shape[:2], p, p)
        both, absent = mask[:, :, None] * mask[:, None, :], np.eye(p) * (1.0 - mask)[:, None, :]
        normal = normal * both[:, None] + absent[:, None]
        right = ((weight * self.left[:, None, :]) @ self.columns) * mask[:, None, :]
        return normal, right

    def squares(self, weight: FloatArray) -> tuple[FloatArray, FloatArray]:
        """Return weighted squares of residuals, and the logarithm of the normal matrix' determinant.

        Parameters
        ----------
        weight : ndarray, shape (K, G, N)

        Returns
        -------
        squares, log_det : ndarray, shape (K, G)
        """
        normal, right = self._of(weight)
        total = np.einsum("kgn,kn->kg", weight, self.left**2)
        log_det = np.zeros(total.shape)
        for j in range(normal.shape[-1]):  # elimination, all matrices side by side
            pivot = np.maximum(normal[..., j, j], TINY)
            log_det += np.log(pivot)
            share = normal[..., j, :] / pivot[..., None]
            total = total - right[..., j] ** 2 / pivot
            right = right - right[..., j, None] * share
            normal = normal - normal[..., :, j, None] * share[..., None, :]
        return np.maximum(total, 0.0), log_det


def _best(equations: _Equations, u2: FloatArray, shape: FloatArray, first_guess: FloatArray) -> FloatArray:
    """Return the scatter of each fit with the greatest residual likelihood, by grids each inside the last."""
    steps = np.linspace(0.0, 1.0, GRID)
    low, high = np.zeros(len(first_guess)), 3.0 * np.maximum(first_guess, 1e-12)
    each = np.arange(len(first_guess))
    for turn in range(ROUNDS):
        grid = low[:, None] + (high - low)[:, None] * steps
        weight = 1.0 / np.maximum(u2 + grid[:, :, None] ** 2 * shape[:, None, :], TINY)
        squares, log_det = equations.squares(weight)
        found = 0.5 * (np.sum(np.log(weight), axis=2) - squares - log_det)
        best = np.argmax(found, axis=1)
        if turn < ROUNDS - 1:
            low, high = grid[each, np.maximum(best - 1, 0)], grid[each, np.minimum(best + 1, GRID - 1)]
    inner = np.clip(best, 1, GRID - 2)
    below, at, above = (found[each, inner + k] for k in (-1, 0, 1))
    curve = below - 2.0 * at + above
    shift = np.where(curve < 0.0, 0.5 * (below - above) / np.where(curve < 0.0, curve, -1.0), 0.0)
    shift = np.where(best == inner, shift, 0.0)
    return np.asarray(grid[each, best] + shift * (grid[:, 1] - grid[:, 0]), dtype=np.float64)
