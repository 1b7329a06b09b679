"""``floorswing command``: what to command for a wanted angle."""

from __future__ import annotations

import json
import math
from pathlib import Path
from typing import TYPE_CHECKING, Any

import click

if TYPE_CHECKING:
    from calib.command import Command


@click.command(
    short_help="Say what to command for wanted angles.",
    context_settings={"ignore_unknown_options": True},
)
@click.option("--fit", "fit_file", required=True, type=click.Path(path_type=Path), help="fit.json that `fit` wrote.")
@click.option("--json", "as_json", is_flag=True, help="Print JSON instead of a table.")
@click.argument("angles", nargs=-1, required=True, metavar="ANGLE...")
def command(fit_file: Path, as_json: bool, angles: tuple[str, ...]) -> None:
    """Print the wheel degrees for each ANGLE (degrees; negative turns clockwise).

    Each comes with the 95 % interval of that number and the band in which 95 % of single turns land.
    """
    from calib.command import command_for, tells_reversal
    from floorswing.fitting import read_fit

    wanted = [_angle(text) for text in angles]
    fitted = read_fit(fit_file)
    starts = (False, True) if tells_reversal(fitted) else (False,)
    found = [command_for(fitted, angle, after_reversal=start) for angle in wanted for start in starts]
    if as_json:
        click.echo(json.dumps([_document(one) for one in found], indent=2))
        return
    click.echo(_table(found, with_start=len(starts) > 1))
    if any(one.extrapolated for one in found):
        low, high = fitted.tried_wheel_deg
        click.echo(f"(*) outside the {low:g} to {high:g} wheel degrees that were tried: an extrapolation.")


def _angle(text: str) -> float:
    try:
        value = float(text)
    except ValueError:
        raise click.UsageError(f"ANGLE: found {text!r}; accepted: degrees such as 90 or -45") from None
    if not math.isfinite(value) or value == 0.0 or abs(value) > 36000.0:
        raise click.UsageError(f"ANGLE: found {text}; accepted: degrees other than 0, up to 36000 either way")
    return value


def _table(found: list[Command], *, with_start: bool) -> str:
    from floorswing.tables import table

    header = ["wanted deg", "command wheel deg", "95 % interval", "95 % of single turns land in"]
    rows = [_row(one) for one in found]
    if with_start:
        header.insert(1, "start")
        for row, one in zip(rows, found, strict=True):
            row.insert(1, "reversed" if one.after_reversal else "same way")
    return table(header, rows)


def _row(one: Command) -> list[str]:
    wheel = one.wheel_deg
    mark = " *" if one.extrapolated else ""
    return [
        f"{one.wanted_deg:+g}",
        f"{wheel.value:+.1f}{mark}",
        f"{wheel.low:+.1f} to {wheel.high:+.1f}",
        f"{one.low_deg:+.2f} to {one.high_deg:+.2f} deg",
    ]


def _document(one: Command) -> dict[str, Any]:
    wheel = one.wheel_deg
    return {
        "wanted_deg": one.wanted_deg,
        "start": "reversed" if one.after_reversal else "same way",
        "wheel_deg": wheel.value,
        "u_wheel_deg": wheel.u,
        "low_wheel_deg": wheel.low if math.isfinite(wheel.low) else None,
        "high_wheel_deg": wheel.high if math.isfinite(wheel.high) else None,
        "single_turn_low_deg": one.low_deg,
        "single_turn_high_deg": one.high_deg,
        "confidence": one.confidence,
        "extrapolated": one.extrapolated,
    }
