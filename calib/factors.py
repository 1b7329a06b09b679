"""Any further column of the trial (load, speed, tyre ...): whether the gain depends on it."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from calib.about_fit import AboutFit
from calib.errors import NotIdentified
from calib.intervals import Estimate, t_estimate
from calib.terms import AddedTerms, added_terms

FloatArray = NDArray[np.float64]


@dataclass(frozen=True, eq=False, kw_only=True, slots=True)
class Factor:
    """Dependence of the gain on a column.

    Parameters
    ----------
    name : str
    effects : tuple of (str, Estimate)
        Relative change of the gain: per unit where the column holds three or more different numbers, otherwise of each
        value against the first.
    test : AddedTerms
    """

    name: str
    effects: tuple[tuple[str, Estimate], ...]
    test: AddedTerms


def find_factor(about: AboutFit, name: str, *, confidence: float = 0.95) -> Factor:
    """Return the dependence of heading changes on a column of the table.

    Raises
    ------
    calib.errors.CalibError
        If the turns cannot tell.
    """
    labels, columns = columns_of(about.table.factors[name])
    extra = columns * about.expected_deg[:, None]
    if _by_run(about.table.run, about.table.factors[name]):
        raise NotIdentified("it changes from run to run only; compare the turns by it")
    test = added_terms(about.base, extra, about.along_deg, about.weight)
    u = np.sqrt(np.diag(test.cov))
    return Factor(
        name=name,
        effects=tuple(
            (label, t_estimate(float(test.coefficients[k]), float(u[k]), test.dof_left, confidence))
            for k, label in enumerate(labels)
        ),
        test=test,
    )


def columns_of(values: Sequence[str]) -> tuple[tuple[str, ...], FloatArray]:
    """Return names and columns of a column's effects: one for numbers, or one for each value but the first.

    Raises
    ------
    NotIdentified
        If all values are one, or almost all differ without being numbers.
    """
    levels = tuple(dict.fromkeys(values))
    if len(levels) < 2:
        raise NotIdentified("all turns have one value of it")
    numbers = np.array([_number(value) for value in values])
    if len(levels) > 2 and np.all(np.isfinite(numbers)):
        return ("per unit",), (numbers - numbers.mean())[:, None]
    if 2 * len(levels) > len(values):
        raise NotIdentified("most of its values occur once only")
    member = np.array([[value == level for level in levels[1:]] for value in values], dtype=float)
    first = levels[0] or "blank"
    return tuple(f"{level or 'blank'} against {first}" for level in levels[1:]), member


def _by_run(run: Sequence[str], values: Sequence[str]) -> bool:
    return len(set(zip(run, values, strict=True))) == len(set(run)) > 1


def _number(text: str) -> float:
    try:
        return float(text)
    except ValueError:
        return math.nan
