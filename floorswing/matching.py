"""Commands to turns: which command each measured turn answers, and what to say about it.

The pairing itself is `calib.match.match_turns`; here it becomes numbers in the table, flags, events and
warnings.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from calib.match import Match, match_turns
from floorswing.commands_file import Commands
from floorswing.errors import CommandsMismatch
from floorswing.keys import listed
from floorswing.records import MeasuredTurn
from vision.records import ClipResult, Event, Turn

DOUBTFUL_BELOW = 0.95
"""A pair less probable than this is flagged."""

DOUBTFUL_MATCH = "doubtful_match"
EXTRA = "extra"
MISSING_TURN = "missing turn"


@dataclass(frozen=True, kw_only=True, slots=True)
class Matched:
    """The turns of one clip with their commands, the events with missing turns added, and warnings."""

    turns: tuple[MeasuredTurn, ...]
    events: tuple[Event, ...]
    warnings: tuple[str, ...]


@dataclass(frozen=True, kw_only=True, slots=True)
class Remedies:
    """What somebody knows about the trial that the pictures do not show.

    Parameters
    ----------
    from_command : int
        The first turn filmed answers this command, counted from 1, or a later one.
    undriven : tuple of int
        Commands, counted from 1, that were never driven.
    stray_turns : tuple of int
        Turns, as numbered in ``turns.csv``, that answer no command.
    """

    from_command: int = 1
    undriven: tuple[int, ...] = ()
    stray_turns: tuple[int, ...] = ()

    def commands_of(self, n_commands: int) -> list[int]:
        """Return the commands, counted from 0, that a turn can answer.

        Raises
        ------
        CommandsMismatch
            If a number is not one of a command.
        """
        for number in (self.from_command, *self.undriven):
            if not 1 <= number <= n_commands:
                raise CommandsMismatch(
                    f"command {number} was named, but the trial has {_count(n_commands, 'command')}; accepted: 1 to "
                    f"{n_commands}",
                    n_turns=0,
                    n_commands=n_commands,
                    n_matched=0,
                )
        never = {number - 1 for number in self.undriven}
        return [number for number in range(self.from_command - 1, n_commands) if number not in never]

    def turns_of(self, n_turns: int) -> list[int]:
        """Return the turns, counted from 0, that may answer a command.

        Raises
        ------
        CommandsMismatch
            If a number is not one of a turn.
        """
        for number in self.stray_turns:
            if not 1 <= number <= n_turns:
                raise CommandsMismatch(
                    f"turn {number} was named, but {_count(n_turns, 'turn')} were seen; accepted: 1 to {n_turns}",
                    n_turns=n_turns,
                    n_commands=0,
                    n_matched=0,
                )
        return [number for number in range(n_turns) if number + 1 not in self.stray_turns]


NO_REMEDIES = Remedies()


def match_clip(result: ClipResult, commands: Commands, remedies: Remedies = NO_REMEDIES) -> Matched:
    """Match the turns of one clip to the whole list of commands.

    Raises
    ------
    CommandsMismatch
        If fewer than half of the turns answer a command, or a remedy names what is not there.
    """
    return match_clips([result], commands, remedies)[0]


def match_clips(
    results: Sequence[ClipResult], commands: Commands, remedies: Remedies = NO_REMEDIES
) -> list[Matched]:
    """Match the turns of several clips, filmed one after the other, to one list that runs through them all.

    Turns named as strays are counted through all clips.

    Raises
    ------
    CommandsMismatch
        If fewer than half of the turns answer a command, or a remedy names what is not there.
    """
    turns = [turn for result in results for turn in result.turns]
    match = _match(turns, commands, remedies)
    _refuse_mismatch(match, len(turns) - len(remedies.stray_turns), commands)
    matched = []
    first = 0
    for result, missing in zip(results, _missing_of_clips(results, match), strict=True):
        matched.append(_clip(result, first, match, missing, commands))
        first += len(result.turns)
    return matched


def _match(turns: Sequence[Turn], commands: Commands, remedies: Remedies) -> Match:
    """Return the pairing of the turns and commands that may answer each other, numbered as all of them are."""
    asked, driven = remedies.commands_of(len(commands.wheel_deg)), remedies.turns_of(len(turns))
    match = match_turns(
        [turns[n].heading_change_deg for n in driven],
        [turns[n].u_heading_change_deg for n in driven],
        [commands.wheel_deg[n] for n in asked],
    )
    answers: list[int | None] = [None] * len(turns)
    probability = np.ones(len(turns))
    for n, command, p in zip(driven, match.command_index, match.probability, strict=True):
        answers[n] = None if command is None else asked[command]
        probability[n] = p
    return Match(
        command_index=tuple(answers),
        probability=probability,
        missing=tuple(asked[command] for command in match.missing),
        extra=tuple(n for n, command in enumerate(answers) if command is None),
        gain_deg_per_wheel_deg=match.gain_deg_per_wheel_deg,
        mirrored=match.mirrored,
    )


def _refuse_mismatch(match: Match, n_turns: int, commands: Commands) -> None:
    n_matched = sum(command is not None for command in match.command_index)
    if 2 * n_matched >= n_turns and not match.mirrored:
        return
    n_commands = len(commands.wheel_deg)
    found = f"{_count(n_turns, 'turn')} seen, {_count(n_commands, 'command')} in the trial, {n_matched} fit"
    if match.mirrored:
        advice = (
            "with every sign changed they would fit: positive turns the robot counter-clockwise from above"
        )
    else:
        advice = (
            "check [commands] wheel_deg: one entry for each turn, in the order driven; --from-command, --undriven "
            "and --stray-turns say what the pictures do not"
        )
    raise CommandsMismatch(
        f"the commands do not fit the turns: {found}; {advice}",
        n_turns=n_turns,
        n_commands=n_commands,
        n_matched=n_matched,
    )


def _count(number: int, noun: str) -> str:
    return f"{number} {noun}" + ("" if number == 1 else "s")


def _missing_of_clips(results: Sequence[ClipResult], match: Match) -> list[list[int]]:
    """Share out the commands without a turn: each goes to the clip of the last turn before it."""
    clip_of_turn = [number for number, result in enumerate(results) for _ in result.turns]
    shares: list[list[int]] = [[] for _ in results]
    for command in match.missing:
        before = [
            clip
            for clip, matched in zip(clip_of_turn, match.command_index, strict=True)
            if matched is not None and matched < command
        ]
        shares[before[-1] if before else 0].append(command)
    return shares


def _clip(result: ClipResult, first: int, match: Match, missing: list[int], commands: Commands) -> Matched:
    last = first + len(result.turns)
    index = match.command_index[first:last]
    probability = [float(p) for p in match.probability[first:last]]
    turns = tuple(
        _turn(number, turn, command, p, commands)
        for number, (turn, command, p) in enumerate(
            zip(result.turns, index, probability, strict=True), start=1
        )
    )
    gaps = tuple(_missing_turn(result, index, command, commands) for command in missing)
    return Matched(
        turns=turns,
        events=tuple(sorted((*result.events, *gaps), key=lambda event: (event.start_s, event.end_s))),
        warnings=_warnings(turns, missing),
    )


def _turn(
    number: int, turn: Turn, command: int | None, probability: float, commands: Commands
) -> MeasuredTurn:
    flags = list(turn.flags)
    if command is None:
        flags.append(EXTRA)
    if probability < DOUBTFUL_BELOW:
        flags.append(DOUBTFUL_MATCH)
    names = [name for name, _ in commands.factors]
    return MeasuredTurn(
        turn=number,
        start_s=turn.start_s,
        end_s=turn.end_s,
        commanded_wheel_deg=float("nan") if command is None else commands.wheel_deg[command],
        heading_change_deg=turn.heading_change_deg,
        u_heading_change_deg=turn.u_heading_change_deg,
        start_heading_deg=turn.start_heading_deg,
        end_heading_deg=turn.end_heading_deg,
        peak_rate_deg_s=turn.peak_rate_deg_s,
        overshoot_deg=turn.overshoot_deg,
        settle_s=turn.settle_s,
        centre_x_mm=turn.centre_x_mm,
        centre_y_mm=turn.centre_y_mm,
        wander_mm=turn.wander_mm,
        flags=tuple(flags),
        factors=dict.fromkeys(names, "") if command is None else commands.factors_of(command),
    )


def _missing_turn(result: ClipResult, index: Sequence[int | None], command: int, commands: Commands) -> Event:
    """Return the event of a command without a turn: it happened, if at all, between its neighbours."""
    before = [
        turn.end_s for turn, c in zip(result.turns, index, strict=True) if c is not None and c < command
    ]
    after = [
        turn.start_s for turn, c in zip(result.turns, index, strict=True) if c is not None and c > command
    ]
    time_s = result.track.time_s
    return Event(
        start_s=max(before, default=float(time_s[0]) if len(time_s) else 0.0),
        end_s=min(after, default=float(time_s[-1]) if len(time_s) else 0.0),
        kind=MISSING_TURN,
        detail=f"no turn seen for command {command + 1} ({commands.wheel_deg[command]:g} wheel degrees)",
    )


def _warnings(turns: Sequence[MeasuredTurn], missing: Sequence[int]) -> tuple[str, ...]:
    extra = [turn.turn for turn in turns if EXTRA in turn.flags]
    doubtful = [turn.turn for turn in turns if DOUBTFUL_MATCH in turn.flags]
    said = []
    if missing:
        said.append(f"no turn seen for {_numbered('command', [c + 1 for c in missing])}")
    if extra:
        said.append(f"no command fits {_numbered('turn', extra)}; counted as extra, not used in a fit")
    if doubtful:
        said.append(f"doubtful which command {_numbered('turn', doubtful)} answered; see flags in turns.csv")
    return tuple(said)


def _numbered(noun: str, numbers: Sequence[int], most: int = 8) -> str:
    """Return `turn 3`, `turns 3, 5 and 6`, or the first few and how many more."""
    shown = [str(number) for number in numbers[:most]]
    if len(numbers) > most:
        shown.append(f"{len(numbers) - most} more")
    return f"{noun if len(numbers) == 1 else noun + 's'} {listed(shown)}"
