"""Measured folders put in order for the page: one subject for each robot on each surface, its fit, its turns."""

from __future__ import annotations

import math
from collections.abc import Callable, Iterable, Sequence
from dataclasses import dataclass, replace
from pathlib import Path

import numpy as np

from calib.consistency import Consistency
from calib.errors import CalibError
from calib.fit import Fit
from calib.table import TurnTable
from calib.turns import reversals
from floorswing.errors import FileError
from floorswing.files import read_measurement
from floorswing.fitting import FIT_FILE, FitResult, fit_measurements, measured_folders, read_fit, usable_turns
from floorswing.records import MeasuredTurn, Measurement
from floorswing.turn_tables import table_of
from floorswing.writing import distinct_names

USUAL_DEG = (45.0, 90.0, 180.0, 360.0)
"""The angles that the first screen answers for."""

STRAYS = "it strays"
"""How the reason begins with which a fit leaves a stray out."""


@dataclass(frozen=True, eq=False, kw_only=True, slots=True)
class Seen:
    """A turn as the page shows it.

    Parameters
    ----------
    key : str
        Names the turn everywhere on the page: subject, clip, number.
    order : int
        Place among all turns of the subject, from 1.
    clip : str
    turn : MeasuredTurn
    reversed_ : float
        1 if it started against the turn before, 0 if along it, NaN if not known.
    expected_deg : float
        What the fit says for its command; NaN without a fit or a command.
    left_out : str
        Why it is not in the fit; empty if it is.
    straggles : bool
        Whether it lies far out and is in the fit.
    """

    key: str
    order: int
    clip: str
    turn: MeasuredTurn
    reversed_: float
    expected_deg: float
    left_out: str
    straggles: bool

    @property
    def along_deg(self) -> float:
        """How much further than expected it went, along its command."""
        return (self.turn.heading_change_deg - self.expected_deg) * math.copysign(1.0, self.turn.commanded_wheel_deg)

    @property
    def is_stray(self) -> bool:
        """Whether the fit left it out as too far from all others."""
        return self.left_out.startswith(STRAYS)

    @property
    def standing(self) -> int:
        """How early it is looked at: 0 strays, 1 flagged, 2 stragglers, 3 all others."""
        return 0 if self.is_stray else 1 if self.turn.flags else 2 if self.straggles else 3


@dataclass(frozen=True, eq=False, kw_only=True, slots=True)
class Subject:
    """One robot on one surface: its clips, its fit, its turns.

    Parameters
    ----------
    letter : str
        A, B, ...
    measurements : tuple of Measurement
        With tracks.
    result : FitResult or None
    no_fit : str
        Why there is none; empty if there is.
    fit_note : str
        What is to be said of a ``fit.json`` found beside; empty for nothing.
    seen : tuple of Seen
        All turns in order.
    table : TurnTable or None
        The turns given to the fit; None where they allow none.
    consistency : Consistency or None
        What they say of their consistency.
    """

    letter: str
    measurements: tuple[Measurement, ...]
    result: FitResult | None
    no_fit: str
    fit_note: str
    seen: tuple[Seen, ...]
    table: TurnTable | None = None
    consistency: Consistency | None = None

    @property
    def robot(self) -> str:
        """Name of the robot."""
        return self.measurements[0].trial.robot.name

    @property
    def surface(self) -> str:
        """Name of the surface."""
        return self.measurements[0].trial.floor.surface

    @property
    def usable(self) -> tuple[Seen, ...]:
        """Turns with a command and a heading change."""
        return tuple(one for one in self.seen if math.isfinite(one.along_deg))


def gather(folders: Sequence[str | Path], progress: Callable[[float], None] | None = None) -> tuple[Subject, ...]:
    """Read the folders of clips and fit each subject.

    Parameters
    ----------
    folders : sequence of path-like
        Folders that ``measure`` wrote for clips, or folders of such folders.
    progress : callable, optional
        Called with the share that is read.

    Raises
    ------
    FileError
        If one of them is not such a folder, or holds no turn.
    """
    paths = measured_folders(folders)
    measurements = []
    for n, path in enumerate(paths):
        measurements.append(read_measurement(path, with_track=True))
        if progress is not None:
            progress((n + 1) / len(paths))
    if not any(one.turns for one in measurements):
        raise FileError(f"{', '.join(map(str, paths))}: no turn in it, so there is nothing to report; film some turns")
    groups: dict[tuple[str, str], list[Measurement]] = {}
    names = distinct_names(one.name for one in measurements)
    for one in (replace(one, name=name) for one, name in zip(measurements, names, strict=True)):
        groups.setdefault((one.trial.robot.name, one.trial.floor.surface), []).append(one)
    return tuple(_subject(letter_of(n), group) for n, group in enumerate(groups.values()))


def letter_of(number: int) -> str:
    """Return A, B, ... Z, AA, AB ... for 0, 1, ..."""
    letters = ""
    number += 1
    while number:
        number, place = divmod(number - 1, 26)
        letters = chr(ord("A") + place) + letters
    return letters


def _subject(letter: str, group: list[Measurement]) -> Subject:
    result, no_fit, note = _fitted(group)
    return Subject(
        letter=letter,
        measurements=tuple(group),
        result=result,
        no_fit=no_fit,
        fit_note=note,
        seen=tuple(_all_seen(letter, group, result)),
        table=_table(group) if result is not None else None,
        consistency=result.consistency if result is not None else None,
    )


def _table(group: list[Measurement]) -> TurnTable:
    turns, given, _ = usable_turns(group)
    return table_of(group, turns, given)


def _fitted(group: list[Measurement]) -> tuple[FitResult | None, str, str]:
    """Return the fit, or why there is none, and what is to be said of a fit found in the folders."""
    try:
        result = fit_measurements(group)
    except CalibError as error:
        return None, str(error), ""
    found = _kept_fit(group)
    if found is None or _same(found, result.fit):
        return result, "", ""
    with_strays = fit_measurements(group, keep_strays=True)
    if _same(found, with_strays.fit):
        return with_strays, "", "strays were kept in the fit, as in the fit.json found in the folder"
    return result, "", "the fit.json found in the folder is of other turns or choices; these turns were fitted again"


def _kept_fit(group: list[Measurement]) -> Fit | None:
    """Return the fit that lies in the first folder, if it can be read."""
    for one in group:
        if one.folder is not None and (one.folder / FIT_FILE).is_file():
            try:
                return read_fit(one.folder / FIT_FILE)
            except FileError:
                return None
    return None


def _same(a: Fit, b: Fit) -> bool:
    return (
        a.model == b.model
        and a.n_turns == b.n_turns
        and a.coefficients.shape == b.coefficients.shape
        and bool(np.allclose(a.coefficients, b.coefficients, rtol=1e-6, atol=1e-9))
    )


def expected_deg(fit: Fit, wheel_deg: float, reversed_: float) -> float:
    """Return the heading change that a fit says for a command; unknown slack counts as taken up."""
    if not math.isfinite(wheel_deg) or wheel_deg == 0.0 or math.copysign(1.0, wheel_deg) not in fit.sides:
        return math.nan
    side = math.copysign(1.0, wheel_deg)
    state = reversed_ if math.isfinite(reversed_) else 0.0
    row = fit.gain_row(side) * abs(wheel_deg) - fit.lost_row() * state + fit.offset_row(side)
    return side * float(row @ fit.coefficients)


def _all_seen(letter: str, group: list[Measurement], result: FitResult | None) -> Iterable[Seen]:
    left_out = {(one.clip, one.turn): one.reason for one in result.left_out} if result else {}
    stragglers = set(result.stragglers) if result else set()
    order = 0
    for number, one in enumerate(group, start=1):
        known = [n > 0 and "handled_before" not in turn.flags for n, turn in enumerate(one.turns)]
        states = reversals([turn.commanded_wheel_deg for turn in one.turns], slack_known=known)
        for turn, state in zip(one.turns, states, strict=True):
            order += 1
            expected = expected_deg(result.fit, turn.commanded_wheel_deg, float(state)) if result else math.nan
            yield Seen(
                key=f"{letter}{number}-{turn.turn}",
                order=order,
                clip=one.name,
                turn=turn,
                reversed_=float(state),
                expected_deg=expected,
                left_out=left_out.get((one.name, turn.turn), ""),
                straggles=(one.name, turn.turn) in stragglers,
            )
