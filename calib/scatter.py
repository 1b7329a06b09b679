"""How single turns scatter about the fitted line: three noise laws, each turn's own uncertainty taken into account."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from calib.at_once import search_scatter
from calib.linear import LinearFit, least_squares
from calib.mixture import worth

FloatArray = NDArray[np.float64]

LAWS = {"constant": 0.0, "root": 0.5, "proportional": 1.0}
"""Noise laws by name: the power of the turn's size with which the standard deviation grows."""


@dataclass(frozen=True, eq=False, kw_only=True, slots=True)
class LawShare:
    """A noise law with how much it is believed, and the fit under it.

    Parameters
    ----------
    law : str
        A key of `LAWS`.
    weight : float
        The shares of all laws add up to one.
    scatter_deg : float
        Under this law, of a turn of the data's typical size.
    coefficients : ndarray, shape (P,)
    cov : ndarray, shape (P, P)
    """

    law: str
    weight: float
    scatter_deg: float
    coefficients: FloatArray
    cov: FloatArray

    def scatter_at_deg(self, size: float, typical: float) -> float:
        """Return the standard deviation of turns of a size, the data's typical size given."""
        return float(self.scatter_deg * (abs(size) / typical) ** LAWS[self.law])


@dataclass(frozen=True, eq=False, kw_only=True, slots=True)
class ScatterFit:
    """A linear fit with the scatter that it was weighted by.

    Parameters
    ----------
    linear : LinearFit
        Weighted by the inverse of `variance_deg2`, so that `linear.unscaled_cov` is the covariance.
    scatter_deg : float
        Repeatability standard deviation of a turn of `size_deg`.
    size_deg : float
        Size of turn that `scatter_deg` stands for: the geometric mean of the data, where the laws differ least.
    law : str
        The most likely one.
    shares : tuple of LawShare
    variance_deg2 : ndarray, shape (N,)
    log_likelihood : float
        At the maximum over coefficients, the scatter from its residual likelihood.
    residual_likelihood : float
        Logarithm of the residual likelihood; comparable between laws for the same design.
    """

    linear: LinearFit
    scatter_deg: float
    size_deg: float
    law: str
    shares: tuple[LawShare, ...]
    variance_deg2: FloatArray
    log_likelihood: float
    residual_likelihood: float


def fit_with_scatter(design: FloatArray, data: FloatArray, u: FloatArray, size: FloatArray, law: str) -> ScatterFit:
    """Fit a line and the scatter about it by residual maximum likelihood (Patterson and Thompson 1971).

    Parameters
    ----------
    design : ndarray, shape (N, P)
    data : ndarray, shape (N,)
    u : ndarray, shape (N,)
        Standard uncertainties of the data.
    size : ndarray, shape (N,)
        Sizes of the turns, positive.
    law : str
        A key of `LAWS`.
    """
    least_squares(design, data)  # refuses what cannot be told apart
    shape = shape_of(size, typical_size(size), law)
    taken = np.ones((1, design.shape[1]), dtype=bool)
    found = search_scatter(design, taken, data, u, shape[None, :])
    return fit_at_scatter(design, data, u, size, law, float(found.scatter_deg[0]))


def fit_at_scatter(
    design: FloatArray, data: FloatArray, u: FloatArray, size: FloatArray, law: str, scatter_deg: float
) -> ScatterFit:
    """Fit a line with a scatter that was found before; parameters as of `fit_with_scatter`."""
    u, typical = np.maximum(u, 1e-3 * float(u.max())), typical_size(size)
    return _made(scatter_deg, typical, law, u**2 + scatter_deg**2 * shape_of(size, typical, law), design, data)


def typical_size(size: FloatArray) -> float:
    """Return the geometric mean of sizes."""
    return float(np.exp(np.mean(np.log(size))))


def shape_of(size: FloatArray, typical: float, law: str) -> FloatArray:
    """Return the variances of turns of these sizes, relative to one of `typical` size."""
    return np.asarray((size / typical) ** (2.0 * LAWS[law]))


def _made(
    scatter: float, typical: float, law: str, variance: FloatArray, design: FloatArray, data: FloatArray
) -> ScatterFit:
    variance = np.maximum(variance, (1e-15 * max(float(np.abs(data).max()), 1e-100)) ** 2)
    final = least_squares(design, data, 1.0 / variance)
    likelihood = -0.5 * float(np.sum(np.log(2.0 * np.pi * variance) + final.residuals**2 / variance))
    return ScatterFit(
        linear=final,
        scatter_deg=scatter,
        size_deg=typical,
        law=law,
        shares=(
            LawShare(
                law=law,
                weight=1.0,
                scatter_deg=scatter,
                coefficients=final.coefficients,
                cov=final.unscaled_cov,
            ),
        ),
        variance_deg2=variance,
        log_likelihood=likelihood,
        residual_likelihood=_residual_likelihood(final, variance),
    )


def average_over_laws(fits: Sequence[ScatterFit]) -> ScatterFit:
    """Return the mean of fits of one model to one set of data under different laws, weighted by their likelihood.

    Which law holds is seldom clear from a few dozen turns. The covariance of the mean holds what the laws disagree by,
    so that intervals do not rest on one of them.

    References
    ----------
    Buckland, Burnham and Augustin (1997), Model selection: an integral part of inference, Biometrics 53, 603-618.
    """
    best = max(fits, key=lambda one: one.residual_likelihood)
    if len(fits) == 1:
        return best
    weight = worth(np.exp(np.array([one.residual_likelihood - best.residual_likelihood for one in fits])))
    shares = tuple(
        replace(one.shares[0], weight=float(w)) for w, one in zip(weight, fits, strict=True) if w > 0.0
    )
    each = np.array([one.linear.coefficients for one in fits])
    mean = weight @ each
    within = np.einsum("k,kij->ij", weight, np.array([one.linear.unscaled_cov for one in fits]))
    between = np.einsum("k,ki,kj->ij", weight, each - mean, each - mean)
    residuals = weight @ np.array([one.linear.residuals for one in fits])
    return replace(
        best,
        linear=replace(best.linear, coefficients=mean, unscaled_cov=within + between, residuals=residuals),
        scatter_deg=float(np.sqrt(weight @ np.array([one.scatter_deg**2 for one in fits]))),
        shares=shares,
        variance_deg2=weight @ np.array([one.variance_deg2 for one in fits]),
    )


def average_over_sets(fits: Sequence[ScatterFit], weight: FloatArray) -> ScatterFit:
    """Return the first fit with the shares of fits of the same terms to other sets of turns, weighted by belief."""
    first = fits[0]
    shares = tuple(
        replace(
            share,
            weight=float(w) * share.weight,
            scatter_deg=share.scatter_at_deg(first.size_deg, one.size_deg),
        )
        for w, one in zip(weight, fits, strict=True)
        for share in one.shares
    )
    each, believed = np.array([one.coefficients for one in shares]), np.array([one.weight for one in shares])
    mean = believed @ each
    cov = np.einsum("k,kij->ij", believed, np.array([one.cov for one in shares]))
    cov = cov + np.einsum("k,ki,kj->ij", believed, each - mean, each - mean)
    return replace(
        first,
        linear=replace(first.linear, coefficients=mean, unscaled_cov=cov),
        scatter_deg=float(np.sqrt(believed @ np.array([one.scatter_deg**2 for one in shares]))),
        shares=shares,
    )


def scatter_variance_deg2(shares: Sequence[LawShare], size: FloatArray, typical: float) -> FloatArray:
    """Return the variance of single turns of these sizes, the laws weighted as they are believed."""
    parts = [one.weight * one.scatter_deg**2 * shape_of(size, typical, one.law) for one in shares]
    return np.asarray(sum(parts), dtype=np.float64)


def _residual_likelihood(fit: LinearFit, variance: FloatArray) -> float:
    """Return the logarithm of the residual likelihood, up to a constant that is the same for all laws."""
    size = np.sqrt(np.diag(fit.unscaled_cov))
    _, log_det = np.linalg.slogdet(fit.unscaled_cov / np.outer(size, size))
    log_det_cov = log_det + 2.0 * float(np.sum(np.log(size)))
    return float(0.5 * (log_det_cov - np.sum(np.log(variance) + fit.residuals**2 / variance)))
