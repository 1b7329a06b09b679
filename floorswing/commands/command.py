"""``floorswing command``: what to command for a wanted angle, and where turns then land."""

from __future__ import annotations

import json
import math
from dataclasses import dataclass
from pathlib import Path
from typing import TYPE_CHECKING, Any

import click

from floorswing.options import angle_of

if TYPE_CHECKING:
    from calib.command import Command
    from calib.fit import Fit
    from calib.intervals import Estimate
    from calib.landing import Band


@dataclass(frozen=True, slots=True)
class _Asked:
    """What was asked for beside the command itself."""

    confidence: float
    share: float
    within_deg: float | None
    n_turns: int | None


@dataclass(frozen=True, slots=True)
class _Answer:
    """A command with where its turns land."""

    command: Command
    holds: Band
    hits: Estimate | None
    after: Band | None


@click.command(
    short_help="Say what to command for wanted angles.",
    context_settings={"ignore_unknown_options": True},
)
@click.option("--fit", "fit_file", required=True, type=click.Path(path_type=Path), help="fit.json that `fit` wrote.")
@click.option(
    "--confidence",
    type=click.FloatRange(0.5, 0.999),
    default=0.95,
    show_default=True,
    help="Of every interval and band.",
)
@click.option(
    "--share",
    type=click.FloatRange(0.5, 0.999),
    default=0.95,
    show_default=True,
    help="Share of all turns that the tolerance band holds.",
)
@click.option(
    "--within",
    "within_deg",
    type=click.FloatRange(0.0, 360.0, min_open=True),
    metavar="DEG",
    help="Also: how many turns land this near to the wanted angle.",
)
@click.option(
    "--turns",
    "n_turns",
    type=click.IntRange(1, 10_000),
    metavar="N",
    help="Also: the heading error after N such turns, one after the other.",
)
@click.option("--json", "as_json", is_flag=True, help="Print JSON instead of a table.")
@click.argument("angles", nargs=-1, required=True, metavar="ANGLE...")
def command(
    fit_file: Path,
    confidence: float,
    share: float,
    within_deg: float | None,
    n_turns: int | None,
    as_json: bool,
    angles: tuple[str, ...],
) -> None:
    """Print the wheel degrees for each ANGLE (degrees; negative turns clockwise).

    Each comes with the interval of that number, the band in which the next turn lands, and the tolerance band, which
    holds a share of all turns to come.
    """
    from floorswing.fitting import read_fit

    wanted = [angle_of("ANGLE", text) for text in angles]
    fitted = read_fit(fit_file)
    asked = _Asked(confidence, share, within_deg, n_turns)
    found = _answers(fitted, wanted, asked)
    if as_json:
        click.echo(json.dumps([_document(one, asked) for one in found], indent=2))
        return
    click.echo(_table(found, asked))
    if any(one.command.extrapolated for one in found):
        low, high = fitted.tried_wheel_deg
        click.echo(f"(*) outside the {low:g} to {high:g} wheel degrees that were tried: an extrapolation.")


def _answers(fitted: Fit, wanted: list[float], asked: _Asked) -> list[_Answer]:
    from calib.command import command_for, tells_reversal
    from calib.landing import closure, hit_rate, tolerance_band

    answers = []
    for angle in wanted:
        for start in (False, True) if tells_reversal(fitted) else (False,):
            one = command_for(fitted, angle, after_reversal=start, confidence=asked.confidence)
            answers.append(
                _Answer(
                    command=one,
                    holds=tolerance_band(one, asked.share, asked.confidence),
                    hits=hit_rate(one, asked.within_deg, asked.confidence) if asked.within_deg is not None else None,
                    after=closure(one, asked.n_turns, asked.confidence) if asked.n_turns is not None else None,
                )
            )
    return answers


def _table(found: list[_Answer], asked: _Asked) -> str:
    from floorswing.tables import table

    sure = f"{100.0 * asked.confidence:.4g} %"
    header = ["wanted deg", "command wheel deg", f"{sure} interval", f"next turn lands in ({sure})"]
    header.append(f"{100.0 * asked.share:.4g} % of turns land in ({sure} sure)")
    if asked.within_deg is not None:
        header.append(f"turns within {asked.within_deg:g} deg ({sure})")
    if asked.n_turns is not None:
        header.append(f"error after {asked.n_turns} ({sure})")
    rows = [_row(one) for one in found]
    if any(one.command.after_reversal for one in found):
        header.insert(1, "start")
        for row, one in zip(rows, found, strict=True):
            row.insert(1, "reversed" if one.command.after_reversal else "same way")
    return table(header, rows)


def _row(one: _Answer) -> list[str]:
    wheel = one.command.wheel_deg
    mark = " *" if one.command.extrapolated else ""
    row = [
        f"{one.command.wanted_deg:+g}",
        f"{wheel.value:+.1f}{mark}",
        f"{wheel.low:+.1f} to {wheel.high:+.1f}",
        f"{one.command.low_deg:+.2f} to {one.command.high_deg:+.2f} deg",
        f"{one.holds.low_deg:+.2f} to {one.holds.high_deg:+.2f} deg",
    ]
    if one.hits is not None:
        row.append(f"{one.hits.value:.1%} ({one.hits.low:.1%} to {one.hits.high:.1%})")
    if one.after is not None:
        row.append(f"{one.after.low_deg:+.2f} to {one.after.high_deg:+.2f} deg")
    return row


def _document(one: _Answer, asked: _Asked) -> dict[str, Any]:
    command, wheel = one.command, one.command.wheel_deg
    document: dict[str, Any] = {
        "wanted_deg": command.wanted_deg,
        "start": "reversed" if command.after_reversal else "same way",
        "wheel_deg": wheel.value,
        "u_wheel_deg": wheel.u,
        "low_wheel_deg": wheel.low if math.isfinite(wheel.low) else None,
        "high_wheel_deg": wheel.high if math.isfinite(wheel.high) else None,
        "single_turn_low_deg": command.low_deg,
        "single_turn_high_deg": command.high_deg,
        "tolerance_share": asked.share,
        "tolerance_low_deg": one.holds.low_deg,
        "tolerance_high_deg": one.holds.high_deg,
        "confidence": command.confidence,
        "extrapolated": command.extrapolated,
    }
    if one.hits is not None:
        document["hit_rate"] = {
            "within_deg": asked.within_deg,
            "value": one.hits.value,
            "u": one.hits.u,
            "low": one.hits.low,
            "high": one.hits.high,
        }
    if one.after is not None:
        document["closure"] = {"turns": asked.n_turns, "low_deg": one.after.low_deg, "high_deg": one.after.high_deg}
    return document
