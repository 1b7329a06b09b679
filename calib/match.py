"""Which command each measured turn belongs to, in order, with turns missing and extra.

Turns and commands are two sequences in time. A path through them pairs a turn with a command, leaves a
command without a turn, or leaves a turn without a command. Every path has a probability, from how well the
paired sizes and directions agree; sums over all paths (forward and backward, Rabiner 1989) give the
probability of each pair. Gain, dead band and scatter are not known beforehand: they are estimated together
with the pairing (expectation-maximisation, Dempster, Laird and Rubin 1977), from several starting gains.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike, NDArray

from calib.errors import CalibError

FloatArray = NDArray[np.float64]

TAIL_DOF = 4.0
"""Degrees of freedom of the scatter: a turn that slipped badly is still the command's turn."""
P_MISSING = 0.02
"""Prior chance that a command left no measured turn."""
P_NOT_FILMED = 0.1
"""The same for commands at either end of the list: recording starts late and breaks off more often."""
P_EXTRA = 0.02
"""Prior chance that a measured turn answers no command."""
WRONG_WAY = 1e-4
"""Prior chance of a turn against its command's direction, beyond what noise explains."""
GAIN_CENTRE, GAIN_LOG_SD = 0.5, 0.7
"""Broad log-normal prior of the gain; it only weighs in when the turns leave the gain open."""
SCATTER_CENTRE, SCATTER_LOG_SD = 0.02, 1.0
"""Log-normal prior of the scatter as a fraction of the turn."""
SIDE_RELATIVE_SD = 0.05
"""Prior spread of the difference in gain between the directions, as a fraction of the gain."""


@dataclass(frozen=True, eq=False, kw_only=True, slots=True)
class Match:
    """The most probable pairing of M measured turns with C commands.

    Parameters
    ----------
    command_index : tuple of int or None, length M
        The command of each turn, counted from 0; None for a turn without one. Increasing.
    probability : ndarray, shape (M,)
        Posterior probability that this assignment (or this "no command") is the right one.
    missing : tuple of int
        Commands without a turn.
    extra : tuple of int
        Turns without a command.
    gain_deg_per_wheel_deg : float
        Gain used in the pairing; NaN when no turn could inform it.
    mirrored : bool
        True when the turns fit the commands far better with every direction reversed, which points at a
        sign mistake in the commands; the pairing itself never uses reversed directions.
    """

    command_index: tuple[int | None, ...]
    probability: FloatArray
    missing: tuple[int, ...]
    extra: tuple[int, ...]
    gain_deg_per_wheel_deg: float
    mirrored: bool = False

    def __post_init__(self) -> None:
        probability = np.array(self.probability, dtype=np.float64)
        if probability.shape != (len(self.command_index),):
            raise ValueError("one probability for each turn is needed")
        probability.setflags(write=False)
        object.__setattr__(self, "probability", probability)


@dataclass(frozen=True, eq=False, kw_only=True, slots=True)
class _Data:
    """Checked input, with which commands start against the previous direction."""

    heading_deg: FloatArray
    u_deg: FloatArray
    wheel_deg: FloatArray
    usable: NDArray[np.bool_]
    reversed_sign: FloatArray
    """Sign of the command where it reverses the previous one, else 0; shape (C,)."""


@dataclass(frozen=True, eq=False, kw_only=True, slots=True)
class _Law:
    """The relation used while pairing: heading = gain w + side |w| - lost sign(w) [reversed]."""

    gain: float
    side: float
    lost_deg: float
    scatter: float
    """Standard deviation as a fraction of the turn."""


def match_turns(
    heading_change_deg: ArrayLike,
    u_heading_change_deg: ArrayLike,
    commanded_wheel_deg: ArrayLike,
    *,
    usable: ArrayLike | None = None,
) -> Match:
    """Pair measured turns with commands, in order, by size and direction.

    Parameters
    ----------
    heading_change_deg, u_heading_change_deg : array_like, shape (M,)
        Measured turns in the order driven and their standard uncertainties, in degrees.
    commanded_wheel_deg : array_like, shape (C,)
        Commands in the order given, in wheel degrees, none zero.
    usable : array_like of bool, shape (M,), optional
        False where the size of a turn tells nothing (cut by the end of the clip, hidden); such a turn keeps
        its place in the order and pairs with any command. A turn that is not finite is taken as unusable.

    Returns
    -------
    Match
        The assignment with the greatest expected number of right turns among all in-order assignments.

    Raises
    ------
    CalibError
        If the lengths differ or a command is zero or not finite.
    """
    data = _checked(heading_change_deg, u_heading_change_deg, commanded_wheel_deg, usable)
    n_turns, n_commands = data.heading_deg.size, data.wheel_deg.size
    if n_turns == 0 or n_commands == 0:
        return _result(np.zeros((n_turns, n_commands)), np.ones(n_turns), np.nan, mirrored=False)
    if not data.usable.any():
        gamma, extra, _ = _posterior(data, _Law(gain=GAIN_CENTRE, side=0, lost_deg=0, scatter=1))
        return _result(gamma, extra, np.nan, mirrored=False)
    modes = _modes(data)
    gamma, extra = _mix(modes)
    best = max(modes, key=lambda m: m.evidence)
    return _result(gamma, extra, best.law.gain, mirrored=_is_mirrored(data, best))


def _checked(heading: ArrayLike, u_heading: ArrayLike, wheel: ArrayLike, usable: ArrayLike | None) -> _Data:
    heading_deg = np.array(heading, dtype=np.float64).reshape(-1)
    u_deg = np.array(u_heading, dtype=np.float64).reshape(-1)
    wheel_deg = np.array(wheel, dtype=np.float64).reshape(-1)
    if u_deg.shape != heading_deg.shape:
        raise CalibError(f"{heading_deg.size} turns came with {u_deg.size} uncertainties; one for each is needed")
    if not np.all(np.isfinite(wheel_deg) & (wheel_deg != 0)):
        where = int(np.flatnonzero(~(np.isfinite(wheel_deg) & (wheel_deg != 0)))[0])
        raise CalibError(f"command {where + 1} is {wheel_deg[where]:g} wheel degrees; a command is finite and not zero")
    mask = np.isfinite(heading_deg)
    if usable is not None:
        given = np.array(usable, dtype=bool).reshape(-1)
        if given.shape != heading_deg.shape:
            raise CalibError(f"{heading_deg.size} turns came with {given.size} usable marks; one for each is needed")
        mask &= given
    u_deg = np.where(np.isfinite(u_deg) & (u_deg >= 0), u_deg, 0.0)
    sign = np.sign(wheel_deg)
    reversed_sign = np.where(np.concatenate(([False], sign[1:] != sign[:-1])), sign, 0.0)
    return _Data(
        heading_deg=np.where(mask, heading_deg, 0.0),
        u_deg=u_deg,
        wheel_deg=wheel_deg,
        usable=mask,
        reversed_sign=reversed_sign[: wheel_deg.size],
    )


def _is_mirrored(data: _Data, best: _Mode) -> bool:
    """Say whether turns and commands left over on both sides would pair with every direction reversed."""
    if best.gamma.sum() > min(best.gamma.shape) - 0.5:
        return False
    opposite = max(_modes(_mirror(data)), key=lambda m: m.evidence)
    return bool(opposite.evidence > best.evidence + np.log(1e6))


def _mirror(data: _Data) -> _Data:
    return _Data(
        heading_deg=-data.heading_deg,
        u_deg=data.u_deg,
        wheel_deg=data.wheel_deg,
        usable=data.usable,
        reversed_sign=data.reversed_sign,
    )


def _broad_log_density(data: _Data) -> float:
    """Log density (1/deg) of a turn about which nothing is known: flat over the sizes seen."""
    return float(-np.log(2.5 * np.abs(data.heading_deg[data.usable]).max())) if data.usable.any() else 0.0


def _means(data: _Data, law: _Law) -> FloatArray:
    wheel = data.wheel_deg
    mean: FloatArray = law.gain * wheel + law.side * np.abs(wheel) - law.lost_deg * data.reversed_sign
    return mean


def _variances(data: _Data, law: _Law) -> FloatArray:
    """Variance of turn i about command j; the scatter grows with the root of the size."""
    size = law.gain * np.abs(data.wheel_deg)
    spread = law.scatter**2 * size * np.exp(np.mean(np.log(size)))
    variance: FloatArray = data.u_deg[:, None] ** 2 + spread[None, :]
    return variance


def _log_pair(data: _Data, law: _Law) -> FloatArray:
    """Log probability density of turn i given command j, shape (M, C)."""
    variance = _variances(data, law)
    z2 = (data.heading_deg[:, None] - _means(data, law)) ** 2 / variance
    constant = np.log(0.375)  # density of Student's t with four degrees of freedom at its centre
    log_density = constant - 0.5 * np.log(variance) - 0.5 * (TAIL_DOF + 1) * np.log1p(z2 / TAIL_DOF)
    against = data.heading_deg[:, None] * data.wheel_deg < 0
    beyond_noise = np.abs(data.heading_deg) > 4 * data.u_deg
    log_density += np.log(WRONG_WAY) * (against & beyond_noise[:, None])
    pair: FloatArray = np.where(data.usable[:, None], log_density, _broad_log_density(data))
    pair += np.log1p(-P_MISSING) + np.log1p(-P_EXTRA)
    return pair


def _forward(log_pair: FloatArray, log_extra: float) -> FloatArray:
    """Log weight of all paths that use up i turns and j commands, shape (M + 1, C + 1)."""
    n_turns, n_commands = log_pair.shape
    count = np.arange(n_commands + 1)
    weight = np.empty((n_turns + 1, n_commands + 1))
    weight[0] = np.log(P_NOT_FILMED) * count
    for i in range(n_turns):
        missing_run = np.log(P_MISSING if i < n_turns - 1 else P_NOT_FILMED) * count
        arrive = weight[i] + log_extra
        arrive[1:] = np.logaddexp(arrive[1:], weight[i, :-1] + log_pair[i])
        weight[i + 1] = np.logaddexp.accumulate(arrive - missing_run) + missing_run
    return weight


def _posterior(data: _Data, law: _Law) -> tuple[FloatArray, FloatArray, float]:
    """Return P(turn i is command j), P(turn i is extra), and the log evidence."""
    log_pair = _log_pair(data, law)
    log_extra = _broad_log_density(data) + np.log(P_EXTRA)
    ahead = _forward(log_pair, log_extra)
    behind = _forward(log_pair[::-1, ::-1], log_extra)[::-1, ::-1]
    total = float(ahead[-1, -1])
    gamma = np.exp(ahead[:-1, :-1] + log_pair + behind[1:, 1:] - total)
    extra = np.clip(1.0 - gamma.sum(axis=1), 0.0, 1.0)
    return gamma, extra, total


@dataclass(frozen=True, eq=False, kw_only=True, slots=True)
class _Mode:
    law: _Law
    gamma: FloatArray
    extra: FloatArray
    evidence: float


def _log_prior(law: _Law) -> float:
    gain_z = np.log(law.gain / GAIN_CENTRE) / GAIN_LOG_SD
    scatter_z = np.log(law.scatter / SCATTER_CENTRE) / SCATTER_LOG_SD
    side_z = law.side / law.gain / SIDE_RELATIVE_SD
    return float(-0.5 * (gain_z**2 + scatter_z**2 + side_z**2))


def _starting_gains(data: _Data, n_most: int = 8) -> FloatArray:
    """Return the commonest ratios of turn to command among pairs at about the same place in the order."""
    turns = np.flatnonzero(data.usable & (data.heading_deg != 0))
    n_turns, n_commands = data.heading_deg.size, data.wheel_deg.size
    if turns.size == 0:
        return np.array([GAIN_CENTRE])
    reach = abs(n_turns - n_commands) + 3
    expected = turns * (n_commands / n_turns)
    columns = np.arange(n_commands)
    near = np.abs(columns[None, :] - expected[:, None]) <= reach
    ratio = data.heading_deg[turns, None] / data.wheel_deg[None, :]
    log_ratio = np.log(ratio[near & (ratio > 0)])
    if log_ratio.size == 0:
        return np.array([np.abs(data.heading_deg[turns]).mean() / np.abs(data.wheel_deg).mean()])
    bins, counts = np.unique(np.round(log_ratio / 0.05), return_counts=True)
    order = np.argsort(-counts, kind="stable")[:n_most]
    return np.array([np.exp(np.median(log_ratio[np.round(log_ratio / 0.05) == b])) for b in bins[order]])


def _modes(data: _Data) -> list[_Mode]:
    """Climb from the promising starting gains; return the distinct peaks."""
    starts = [_Law(gain=float(g), side=0.0, lost_deg=0.0, scatter=0.06) for g in _starting_gains(data)]
    first = [(_evidence(data, law) + _log_prior(law), law) for law in starts]
    best = max(value for value, _ in first)
    modes: list[_Mode] = []
    for value, law in sorted(first, key=lambda pair: -pair[0]):
        if value < best - 12.0 or len(modes) >= 5:
            break
        mode = _climb(data, law)
        if all(abs(np.log(mode.law.gain / m.law.gain)) > 0.01 for m in modes):
            modes.append(mode)
    return modes


def _evidence(data: _Data, law: _Law) -> float:
    log_extra = _broad_log_density(data) + np.log(P_EXTRA)
    return float(_forward(_log_pair(data, law), log_extra)[-1, -1])


def _climb(data: _Data, law: _Law, n_most: int = 40) -> _Mode:
    """Expectation-maximisation from one starting law."""
    gamma, extra, evidence = _posterior(data, law)
    for _ in range(n_most):
        law_next = _improve(data, law, gamma)
        moved = max(
            abs(np.log(law_next.gain / law.gain)),
            abs(np.log(law_next.scatter / law.scatter)) / 10,
            abs(law_next.lost_deg - law.lost_deg) / np.abs(_means(data, law_next)).max(),
        )
        law = law_next
        gamma, extra, evidence = _posterior(data, law)
        if moved < 1e-3:
            break
    return _Mode(law=law, gamma=gamma, extra=extra, evidence=evidence + _log_prior(law))


def _improve(data: _Data, law: _Law, gamma: FloatArray) -> _Law:
    """One weighted least-squares step on gain, difference of sides and lost heading, then the scatter."""
    variance = _variances(data, law)
    z2 = (data.heading_deg[:, None] - _means(data, law)) ** 2 / variance
    share = gamma * data.usable[:, None]
    weight = share * (TAIL_DOF + 1) / (TAIL_DOF + z2) / variance
    wheel, lost = data.wheel_deg, -data.reversed_sign
    basis = np.stack([wheel, np.abs(wheel), lost])
    per_command = weight.sum(axis=0)
    normal = (basis * per_command) @ basis.T
    right = basis @ (weight * data.heading_deg[:, None]).sum(axis=0)
    longest = np.abs(wheel).max() * law.gain
    normal[1, 1] += 1.0 / (SIDE_RELATIVE_SD * law.gain) ** 2
    normal[2, 2] += 1.0 / (0.2 * longest) ** 2
    normal[0, 0] += 1.0 / (GAIN_LOG_SD * law.gain) ** 2
    right[0] += law.gain / (GAIN_LOG_SD * law.gain) ** 2
    solution = np.linalg.solve(normal, right)
    if solution[2] < 0:  # a dead band never lengthens a turn
        solution[:2] = np.linalg.solve(normal[:2, :2], right[:2])
        solution[2] = 0.0
    gain = float(np.clip(solution[0], 0.5 * law.gain, 2.0 * law.gain))
    side = float(np.clip(solution[1], -0.3 * gain, 0.3 * gain))
    moved = _Law(gain=gain, side=side, lost_deg=float(solution[2]), scatter=law.scatter)
    return _Law(gain=gain, side=side, lost_deg=moved.lost_deg, scatter=_scatter(data, moved, share))


def _scatter(data: _Data, law: _Law, share: FloatArray) -> float:
    """Relative scatter from the weighted residuals, pulled towards the prior when there are few."""
    variance = _variances(data, law)
    excess2 = (data.heading_deg[:, None] - _means(data, law)) ** 2
    robust = (TAIL_DOF + 1) / (TAIL_DOF + excess2 / variance)
    relative2 = excess2 * robust * law.scatter**2 / variance
    count = float(share.sum())
    prior = 1.0 / SCATTER_LOG_SD**2
    mean2 = (float((share * relative2).sum()) + prior * SCATTER_CENTRE**2) / (count + prior)
    return float(np.clip(np.sqrt(mean2), 0.002, 0.2))


def _mix(modes: list[_Mode]) -> tuple[FloatArray, FloatArray]:
    """Average the pairings of all peaks, weighted by their evidence."""
    evidence = np.array([m.evidence for m in modes])
    weight = np.exp(evidence - evidence.max())
    weight /= weight.sum()
    gamma = sum((w * m.gamma for w, m in zip(weight, modes, strict=True)), np.zeros_like(modes[0].gamma))
    extra = sum((w * m.extra for w, m in zip(weight, modes, strict=True)), np.zeros_like(modes[0].extra))
    return gamma, extra


def _result(gamma: FloatArray, extra: FloatArray, gain: float, *, mirrored: bool) -> Match:
    path = _greatest_expectation(gamma, extra)
    probability = [extra[i] if j is None else gamma[i, j] for i, j in enumerate(path)]
    used = {j for j in path if j is not None}
    return Match(
        command_index=path,
        probability=np.clip(np.array(probability, dtype=np.float64), 0.0, 1.0),
        missing=tuple(j for j in range(gamma.shape[1]) if j not in used),
        extra=tuple(i for i, j in enumerate(path) if j is None),
        gain_deg_per_wheel_deg=float(gain),
        mirrored=bool(mirrored),
    )


def _greatest_expectation(gamma: FloatArray, extra: FloatArray) -> tuple[int | None, ...]:
    """Return the in-order assignment with the greatest sum of probabilities (dynamic programming)."""
    n_turns, n_commands = gamma.shape
    value = np.zeros((n_turns + 1, n_commands + 1))
    for i in range(n_turns):
        arrive = value[i] + extra[i]
        arrive[1:] = np.maximum(arrive[1:], value[i, :-1] + gamma[i])
        value[i + 1] = np.maximum.accumulate(arrive)
    path: list[int | None] = []
    i, j = n_turns, n_commands
    while i > 0:
        if j > 0 and value[i, j] == value[i, j - 1]:
            j -= 1
        elif j > 0 and value[i, j] == value[i - 1, j - 1] + gamma[i - 1, j - 1]:
            path.append(j - 1)
            i, j = i - 1, j - 1
        else:
            path.append(None)
            i -= 1
    return tuple(reversed(path))
