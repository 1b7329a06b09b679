"""Commands to turns: which command each measured turn answers, and what to say about it.

The pairing itself is `calib.match.match_turns`; here it becomes numbers in the table, flags, events and
warnings.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

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


def match_clip(result: ClipResult, commands: Commands) -> Matched:
    """Match the turns of one clip to the whole list of commands.

    Raises
    ------
    CommandsMismatch
        If fewer than half of the turns answer a command.
    """
    return match_clips([result], commands)[0]


def match_clips(results: Sequence[ClipResult], commands: Commands) -> list[Matched]:
    """Match the turns of several clips, filmed one after the other, to one list that runs through them all.

    Raises
    ------
    CommandsMismatch
        If fewer than half of the turns answer a command.
    """
    turns = [turn for result in results for turn in result.turns]
    match = match_turns(
        [turn.heading_change_deg for turn in turns],
        [turn.u_heading_change_deg for turn in turns],
        commands.wheel_deg,
    )
    _refuse_mismatch(match, len(turns), commands)
    matched = []
    first = 0
    for result, missing in zip(results, _missing_of_clips(results, match), strict=True):
        matched.append(_clip(result, first, match, missing, commands))
        first += len(result.turns)
    return matched


def _refuse_mismatch(match: Match, n_turns: int, commands: Commands) -> None:
    n_matched = n_turns - len(match.extra)
    if 2 * n_matched >= n_turns and not match.mirrored:
        return
    n_commands = len(commands.wheel_deg)
    found = f"{_count(n_turns, 'turn')} seen, {_count(n_commands, 'command')} in the trial, {n_matched} fit"
    if match.mirrored:
        advice = (
            "with every sign changed they would fit: positive turns the robot counter-clockwise from above"
        )
    else:
        advice = "check [commands] wheel_deg: one entry for each turn, in the order driven"
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
