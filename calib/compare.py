"""Two or more surfaces, tyres, speeds or days: whether the same command does the same, and spreads as much.

The question is put in degrees at a wanted angle: what the second one does for the command that turns the robot by the
wanted angle on the first. That difference is held against 0 (is it seen?) and against a margin (is it small?), and the
p-values of all pairs and angles are adjusted together.
"""

from __future__ import annotations

import itertools
import math
from collections.abc import Sequence
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from calib.about_fit import AboutFit, about_fit
from calib.command import command_for
from calib.consistency import POOLING_LEVEL, cell_columns, cells_of
from calib.differences import all_alike, difference, welch_dof
from calib.equivalence import two_one_sided
from calib.errors import CalibError, NotEnoughTurns, NotIdentified
from calib.fit import CONFIDENCE, Fit, fit_turns
from calib.holm import holm
from calib.intervals import Estimate
from calib.models import SIDE_NAMES
from calib.runs import run_parts
from calib.sample_size import turns_to_settle
from calib.spreads import brown_forsythe, spread_ratio
from calib.table import TurnTable

FloatArray = NDArray[np.float64]

SAME = "same within the margin"
DIFFERENT = "different"
CANNOT_TELL = "cannot tell yet"
WANTED_DEG = 90.0
MARGIN_DEG = 1.0


@dataclass(frozen=True, eq=False, kw_only=True, slots=True)
class Group:
    """One of the things compared.

    Parameters
    ----------
    name : str
    fit : Fit
    about : AboutFit
    n_runs : int
    within : float
        Scatter within runs over the scatter of the fit; 1 where runs are alike or there is one.
    between_deg : float
        Standard deviation of runs, for a turn of the fit's typical size; 0 where runs are alike or there is one.
    """

    name: str
    fit: Fit
    about: AboutFit
    n_runs: int
    within: float
    between_deg: float

    def with_runs(self, u_fit: float, size_deg: float, per_deg: float = 1.0) -> tuple[float, float]:
        """Return an uncertainty of the fit widened by what changes from run to run, and its degrees of freedom.

        Parameters
        ----------
        u_fit : float
        size_deg : float
            Size of the turn it is for.
        per_deg : float
            Change of the quantity with a heading change of one degree.
        """
        if self.between_deg == 0.0:
            return u_fit, float(self.fit.dof)
        relative = self.fit.scatter_at_deg(size_deg) / self.fit.scatter_deg if self.fit.scatter_deg > 0.0 else 1.0
        u_within, u_runs = u_fit * self.within, self.between_deg * relative * abs(per_deg) / math.sqrt(self.n_runs)
        return math.hypot(u_within, u_runs), welch_dof(u_within, self.fit.dof, u_runs, self.n_runs - 1)


@dataclass(frozen=True, kw_only=True, slots=True)
class Pair:
    """Two groups held against each other at one wanted angle.

    Parameters
    ----------
    first, second : str
    wanted_deg : float
    heading_deg : Estimate
        What the second does less what the first does, at the first's command for the wanted angle.
    heading_dof : float
    command_wheel_deg : Estimate
        Second's command for the wanted angle less the first's.
    commands_wheel_deg : tuple of float
        The two commands.
    gain_relative : Estimate
        Second's gain in that direction less the first's, over the first's.
    p_different, p_same : float
        Of no difference, and of a difference beyond the margin; adjusted over all pairs and angles.
    verdict : str
        `SAME`, `DIFFERENT` or `CANNOT_TELL`.
    more : int or None
        Where it cannot be told: turns or runs more in each group that would settle it with chance 0.8, if the
        difference is as found; None where more than ten thousand.
    more_of : str
        ``turns``, or ``runs`` where the runs of a group differ among themselves, so that more turns in them would not
        do.
    """

    first: str
    second: str
    wanted_deg: float
    heading_deg: Estimate
    heading_dof: float
    command_wheel_deg: Estimate
    commands_wheel_deg: tuple[float, float]
    gain_relative: Estimate
    p_different: float
    p_same: float
    verdict: str
    more: int | None = None
    more_of: str = "turns"


@dataclass(frozen=True, kw_only=True, slots=True)
class SpreadPair:
    """The spreads of two groups: second over first, with the F interval, and p-values adjusted over all pairs."""

    first: str
    second: str
    ratio: Estimate
    p_f: float
    p_brown_forsythe: float


@dataclass(frozen=True, kw_only=True, slots=True)
class Together:
    """All groups at once, at one wanted angle: Welch's test that all do the same at the first group's command."""

    wanted_deg: float
    f: float
    dof_above: float
    dof_below: float
    p_value: float


@dataclass(frozen=True, eq=False, kw_only=True, slots=True)
class Comparison:
    """Everything that a comparison says.

    Parameters
    ----------
    groups : tuple of Group
    margin_deg, level, confidence : float
    pairs : tuple of Pair
    spreads : tuple of SpreadPair
        At the size of the first wanted angle.
    spread_together : tuple of float
        Brown and Forsythe's F and p-value for all groups.
    together : tuple of Together
        Empty for two groups.
    notes : tuple of str
    """

    groups: tuple[Group, ...]
    margin_deg: float
    level: float
    confidence: float
    pairs: tuple[Pair, ...]
    spreads: tuple[SpreadPair, ...]
    spread_together: tuple[float, float]
    together: tuple[Together, ...]
    notes: tuple[str, ...]


def compare_tables(
    tables: Sequence[tuple[str, TurnTable]],
    *,
    wanted_deg: Sequence[float] = (),
    margin_deg: float = MARGIN_DEG,
    confidence: float = CONFIDENCE,
) -> Comparison:
    """Compare two or more tables of turns.

    Parameters
    ----------
    tables : sequence of (str, TurnTable)
        Name and turns of each group.
    wanted_deg : sequence of float
        Signed angles at which they are compared; 90 degrees each way that all groups were driven by default.
    margin_deg : float
        Difference that does not matter.
    confidence : float
        Of intervals; one less the level of tests.

    Raises
    ------
    NotEnoughTurns, CalibError
        If there are fewer than two groups, or one of them allows no fit; names the group.
    NotIdentified
        If no direction was driven in all groups.
    """
    if not (margin_deg > 0.0 and math.isfinite(margin_deg)):
        raise ValueError(f"margin {margin_deg}; accepted: degrees above 0")
    if len(tables) < 2:
        raise NotEnoughTurns(f"{len(tables)} to compare; at least two are needed", n_seen=len(tables), n_needed=2)
    names = [name for name, _ in tables]
    if len(set(names)) < len(names):
        raise CalibError(f"two of the things compared have one name ({', '.join(names)}); name each differently")
    groups = tuple(_group(name, table) for name, table in tables)
    angles = _angles(groups, wanted_deg)
    level = 1.0 - confidence
    pairs = [
        _pair(first, second, angle, margin_deg, confidence)
        for first, second in itertools.combinations(groups, 2)
        for angle in angles
    ]
    return Comparison(
        groups=groups,
        margin_deg=margin_deg,
        level=level,
        confidence=confidence,
        pairs=_with_verdicts(pairs, groups, margin_deg, level),
        spreads=_spreads(groups, abs(angles[0]), confidence),
        spread_together=brown_forsythe([_free(group, abs(angles[0])) for group in groups]),
        together=tuple(_together(groups, angle) for angle in angles) if len(groups) > 2 else (),
        notes=_notes(groups),
    )


def _group(name: str, table: TurnTable) -> Group:
    try:
        fit = fit_turns(table.turns)
    except NotEnoughTurns as error:
        raise NotEnoughTurns(f"{name}: {error}", n_seen=error.n_seen, n_needed=error.n_needed) from None
    except CalibError as error:
        raise CalibError(f"{name}: {error}") from None
    about = about_fit(table, fit)
    within, between = _between_runs(about, fit)
    return Group(
        name=name, fit=fit, about=about, n_runs=len(set(about.table.run)), within=within, between_deg=between
    )


def _between_runs(about: AboutFit, fit: Fit) -> tuple[float, float]:
    """Return the scatter within runs over that of the fit, and that of runs; 1 and 0 where runs are alike."""
    which, _ = cells_of(about, fit)
    try:
        parts = run_parts(
            about.along_deg / about.relative,
            np.array(about.table.run),
            cell_columns(which) / about.relative[:, None],
        )
    except CalibError:
        return 1.0, 0.0
    if parts.p_value > POOLING_LEVEL:
        return 1.0, 0.0
    total = math.hypot(fit.scatter_deg, fit.u_typical_deg)
    return min(1.0, parts.repeatability.value / total) if total > 0.0 else 1.0, parts.between.value


def _angles(groups: Sequence[Group], wanted_deg: Sequence[float]) -> tuple[float, ...]:
    common = [side for side in (1.0, -1.0) if all(side in group.fit.sides for group in groups)]
    if not common:
        raise NotIdentified("no direction was driven in all of the things compared, so nothing is alike in them")
    angles = tuple(wanted_deg) or tuple(side * WANTED_DEG for side in common)
    for angle in angles:
        if not math.isfinite(angle) or angle == 0.0:
            raise ValueError(f"wanted angle {angle}; accepted: any finite angle other than 0")
        if math.copysign(1.0, angle) not in common:
            lacking = next(g.name for g in groups if math.copysign(1.0, angle) not in g.fit.sides)
            direction = SIDE_NAMES[math.copysign(1.0, angle)]
            raise NotIdentified(f"{lacking}: no turn is {direction}, so nothing is known of {angle:g} deg")
    return angles


def mean_at(group: Group, wheel_deg: float) -> tuple[float, float, float]:
    """Return the mean heading change along the command from a start the same way, its u and degrees of freedom."""
    side = math.copysign(1.0, wheel_deg)
    row = group.fit.gain_row(side) * abs(wheel_deg) + group.fit.offset_row(side)
    mean = float(row @ group.fit.coefficients)
    return mean, *group.with_runs(math.sqrt(float(row @ group.fit.cov @ row)), mean)


Found = tuple[float, float, float]
"""A value with its standard uncertainty and degrees of freedom."""


def _apart(two: Sequence[Found], confidence: float) -> tuple[Estimate, float, float]:
    (first, u_first, dof_first), (second, u_second, dof_second) = two
    return difference(
        first,
        second,
        u_first=u_first,
        u_second=u_second,
        dof_first=dof_first,
        dof_second=dof_second,
        confidence=confidence,
    )


def _pair(first: Group, second: Group, wanted: float, margin: float, confidence: float) -> Pair:
    both, side = (first, second), math.copysign(1.0, wanted)
    commands = [command_for(group.fit, wanted, confidence=confidence).wheel_deg for group in both]
    gains = [group.fit.gain(side) for group in both]
    ratio = gains[1].value / gains[0].value
    heading, dof, p_different = _apart([mean_at(group, commands[0].value) for group in both], confidence)
    command, _, _ = _apart(
        [
            (one.value, *group.with_runs(one.u, abs(wanted), 1.0 / gain.value))
            for group, one, gain in zip(both, commands, gains, strict=True)
        ],
        confidence,
    )
    shares = [(1.0, ratio * gains[0].u / gains[0].value), (ratio, gains[1].u / gains[0].value)]
    relative, _, _ = _apart(
        [
            (value, *group.with_runs(u, abs(wanted), value / abs(wanted)))
            for group, (value, u) in zip(both, shares, strict=True)
        ],
        confidence,
    )
    same = two_one_sided(heading.value, heading.u, dof, margin, 1.0 - confidence)
    return Pair(
        first=first.name,
        second=second.name,
        wanted_deg=wanted,
        heading_deg=_signed(heading, side),
        heading_dof=dof,
        command_wheel_deg=command,
        commands_wheel_deg=(commands[0].value, commands[1].value),
        gain_relative=relative,
        p_different=p_different,
        p_same=same.p_value,
        verdict="",
    )


def _signed(one: Estimate, side: float) -> Estimate:
    low, high = sorted((side * one.low, side * one.high))
    return Estimate(value=side * one.value, u=one.u, low=low, high=high, confidence=one.confidence)


def _with_verdicts(pairs: list[Pair], groups: Sequence[Group], margin: float, level: float) -> tuple[Pair, ...]:
    named = {group.name: group for group in groups}
    different, same = holm([pair.p_different for pair in pairs]), holm([pair.p_same for pair in pairs])
    judged = []
    for pair, p_different, p_same in zip(pairs, different, same, strict=True):
        verdict = SAME if p_same <= level else DIFFERENT if p_different <= level else CANNOT_TELL
        more, unit = None, "turns"
        if verdict == CANNOT_TELL:
            more, unit = _more(pair, named[pair.first], named[pair.second], margin, level / len(pairs))
        judged.append(
            replace(
                pair, p_different=float(p_different), p_same=float(p_same), verdict=verdict, more=more, more_of=unit
            )
        )
    return tuple(judged)


def _more(pair: Pair, first: Group, second: Group, margin: float, level: float) -> tuple[int | None, str]:
    """Return how many turns, or runs, more in each group would settle a pair."""
    heading, widened = pair.heading_deg, [group for group in (first, second) if group.between_deg > 0.0]
    counts = [group.n_runs for group in widened] or [first.fit.n_turns, second.fit.n_turns]
    more = turns_to_settle(heading.value, heading.u, pair.heading_dof, margin, min(counts), level=level)
    return more, "runs" if widened else "turns"


def _spreads(groups: Sequence[Group], size_deg: float, confidence: float) -> tuple[SpreadPair, ...]:
    duos = list(itertools.combinations(groups, 2))
    found = [
        spread_ratio(
            a.fit.scatter_at_deg(size_deg), a.fit.dof, b.fit.scatter_at_deg(size_deg), b.fit.dof, confidence
        )
        for a, b in duos
    ]
    p_f = holm([p for _, p in found])
    p_bf = holm([brown_forsythe([_free(a, size_deg), _free(b, size_deg)])[1] for a, b in duos])
    return tuple(
        SpreadPair(first=a.name, second=b.name, ratio=ratio, p_f=float(p), p_brown_forsythe=float(q))
        for (a, b), (ratio, _), p, q in zip(duos, found, p_f, p_bf, strict=True)
    )


def _free(group: Group, size_deg: float) -> FloatArray:
    """Return residuals of turns of a size, made as large as the scatter that they come from."""
    fit = group.fit
    sized = fit.scatter_at_deg(size_deg) / fit.scatter_at_deg(fit.size_deg) if fit.scatter_deg > 0.0 else 1.0
    return group.about.evened_deg * sized * math.sqrt(fit.n_turns / fit.dof)


def _together(groups: Sequence[Group], wanted: float) -> Together:
    wheel = command_for(groups[0].fit, wanted).wheel_deg.value
    means = [mean_at(group, wheel) for group in groups]
    f, above, below, p = all_alike(*(list(column) for column in zip(*means, strict=True)))
    return Together(wanted_deg=wanted, f=f, dof_above=above, dof_below=below, p_value=p)


def _notes(groups: Sequence[Group]) -> tuple[str, ...]:
    notes = []
    single = [group.name for group in groups if group.n_runs == 1]
    if single:
        notes.append(
            f"one run only of {', '.join(single)}: what changes from one run to the next (putting the robot down, "
            "battery) cannot be told from what is compared; film each twice or more to tell"
        )
    widened = [group.name for group in groups if group.between_deg > 0.0]
    if widened:
        notes.append(f"the runs of {', '.join(widened)} differ among themselves; the intervals allow for it")
    banded = [group.fit.model.dead_band for group in groups]
    if any(banded) and not all(banded):
        lacking = ", ".join(group.name for group, has in zip(groups, banded, strict=True) if not has)
        notes.append(f"the turns of {lacking} cannot tell a dead band, so part of a difference may be a dead band")
    if any(group.fit.scatter_deg == 0.0 for group in groups):
        still = ", ".join(group.name for group in groups if group.fit.scatter_deg == 0.0)
        notes.append(f"the turns of {still} do not scatter beyond their measurement, so spreads cannot be compared")
    return tuple(notes)
