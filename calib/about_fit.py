"""The turns of a fit about their relation: what further terms, trends and runs are looked for in."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from calib.fit import Fit
from calib.linear import least_squares
from calib.models import design_of
from calib.table import TurnTable

FloatArray = NDArray[np.float64]


@dataclass(frozen=True, eq=False, kw_only=True, slots=True)
class AboutFit:
    """Turns about the relation fitted to them (N turns).

    Parameters
    ----------
    table : TurnTable
        The turns that the fit rests on.
    design : ndarray, shape (N, P)
        Columns of the relation, along the commands' direction.
    along_deg, expected_deg, residual_deg : ndarray, shape (N,)
        Heading change along the command's direction, what the relation says, and the rest.
    relative : ndarray, shape (N,)
        Scatter of each turn relative to a turn of the fit's typical size.
    """

    table: TurnTable
    design: FloatArray
    along_deg: FloatArray
    expected_deg: FloatArray
    residual_deg: FloatArray
    relative: FloatArray

    @property
    def weight(self) -> FloatArray:
        """Inverse variances, relative, shape (N,)."""
        return np.asarray(1.0 / self.relative**2)

    @property
    def base(self) -> FloatArray:
        """Columns of the relation, and of a shift of each run where there are several, shape (N, P + R)."""
        names = dict.fromkeys(self.table.run)
        if len(names) < 2:
            return self.design
        member = np.array(self.table.run)[:, None] == np.array(list(names))
        return np.hstack([self.design, member * self.relative[:, None]])

    @property
    def evened_deg(self) -> FloatArray:
        """Residuals brought to the scatter of a turn of typical size, shape (N,)."""
        return np.asarray(self.residual_deg / self.relative)


def about_fit(table: TurnTable, fit: Fit) -> AboutFit:
    """Return the turns that a fit rests on about its relation, with the relation fitted by least squares."""
    rests = np.ones(len(table), dtype=bool)
    rests[[one.index for one in fit.not_fitted]] = False
    used = table.take(rests)
    turns = used.turns
    design = design_of(turns, fit.model)
    along = np.asarray(turns.heading_deg * turns.side)
    first = np.maximum(design @ fit.coefficients, 1e-3 * fit.size_deg)
    variance = np.ones(len(turns))
    if fit.scatter_deg > 0.0:
        scatter = np.array([fit.scatter_at_deg(size) for size in first])
        variance = (turns.u_deg**2 + scatter**2) / (fit.u_typical_deg**2 + fit.scatter_deg**2)
    relative = np.sqrt(variance)
    solved = least_squares(design, along, 1.0 / variance)
    return AboutFit(
        table=used,
        design=design,
        along_deg=along,
        expected_deg=along - solved.residuals,
        residual_deg=solved.residuals,
        relative=relative,
    )
