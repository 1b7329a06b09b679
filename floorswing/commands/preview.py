"""``floorswing preview``: whether a set-up will do, before the afternoon is spent."""

from __future__ import annotations

import json
import math
from pathlib import Path
from typing import Any

import click


@click.command(short_help="Say whether a set-up will do, from a few seconds or a photo.")
@click.argument("path", type=click.Path(path_type=Path), metavar="CLIP_OR_PHOTO")
@click.option(
    "--trial", type=click.Path(path_type=Path), help="Trial file: its markers are sought, its commands imagined."
)
@click.option(
    "--want",
    type=click.FloatRange(min=0.0, min_open=True),
    metavar="DEG",
    help="Wanted uncertainty of a single turn (plus or minus, about 95 %).",
)
@click.option(
    "--seconds",
    type=click.FloatRange(min=0.5, max=60.0),
    default=2.0,
    show_default=True,
    help="How much of a clip is looked at.",
)
@click.option(
    "--rate",
    type=click.FloatRange(min=1.0, max=2000.0),
    default=90.0,
    show_default=True,
    metavar="DEG_S",
    help="How fast the robot will turn.",
)
@click.option(
    "--rest",
    type=click.FloatRange(min=0.3, max=60.0),
    default=1.2,
    show_default=True,
    metavar="S",
    help="How long it will rest between turns.",
)
@click.option("--json", "as_json", is_flag=True, help="Print everything as JSON.")
def command(
    path: Path, trial: Path | None, want: float | None, seconds: float, rate: float, rest: float, as_json: bool
) -> None:
    """Look at CLIP_OR_PHOTO, the robot where it will be filmed: the first seconds of a clip, or one photo.

    Printed are the markers in figures, the light and the camera, the uncertainty that measuring turns will state, and
    what to change first. A photo cannot show what changes from frame to frame: noise, flicker, coding, a moving camera.
    """
    from floorswing.preview_text import as_document, lines
    from floorswing.previewing import preview

    for name, value in (("--want", want), ("--seconds", seconds), ("--rate", rate), ("--rest", rest)):
        if value is not None and not math.isfinite(value):
            raise click.BadParameter(f"found {value}; accepted: a number", param_hint=name)
    found = preview(path, trial, seconds=seconds, want_deg=want, rate_deg_s=rate, rest_s=rest)
    if as_json:
        document: dict[str, Any] = as_document(found)
        click.echo(json.dumps(document, indent=2, ensure_ascii=False, allow_nan=False))
    else:
        click.echo("\n".join(lines(found)))
