"""``floorswing plan``: what to drive, how often, in which order."""

from __future__ import annotations

import math
from pathlib import Path
from typing import Any

import click


def _above_0(_: click.Context, parameter: click.Parameter, value: float | None) -> float | None:
    if value is not None and not (math.isfinite(value) and value > 0.0):
        raise click.UsageError(f"{parameter.opts[0]}: found {value:g}; accepted: a number above 0")
    return value


def _share(_: click.Context, parameter: click.Parameter, value: float | None) -> float | None:
    if value is not None and not 0.0 < value < 1.0:
        raise click.UsageError(f"{parameter.opts[0]}: found {value:g}; accepted: above 0 and below 1")
    return value


def _sizes(_: click.Context, parameter: click.Parameter, value: str | None) -> tuple[float, ...]:
    from floorswing.new_trial import wheel_degrees

    try:
        return () if value is None else wheel_degrees(value)
    except ValueError as error:
        raise click.UsageError(f"{parameter.opts[0]}: found {value!r}; {error}") from None


@click.command(short_help="Plan how many turns to drive, and in which order.")
@click.option("--wheel-deg", "sizes", callback=_sizes, help='Sizes to command, both ways, such as "95 190 380".')
@click.option("--trial", type=click.Path(path_type=Path), help="Trial file: its sizes, and what --out takes over.")
@click.option("--after", "after", multiple=True, type=click.Path(path_type=Path), help="Measured first batch.")
@click.option("--scatter-deg", type=float, callback=_above_0, help="Expected scatter of single turns.")
@click.option("--mean-deg", type=float, callback=_above_0, help="Wanted half-width: mean of each command.")
@click.option("--spread-share", type=float, callback=_share, help="Wanted half-width: repeatability, as a share of it.")
@click.option("--difference-deg", type=float, callback=_above_0, help="Wanted half-width: difference of two surfaces.")
@click.option("--detect-deg", type=float, callback=_above_0, help="Difference of two surfaces to be seen.")
@click.option("--same-within-deg", type=float, callback=_above_0, help="Margin to show two surfaces the same within.")
@click.option("--hit-rate-share", type=float, callback=_share, help="Wanted half-width: hit rate of each command.")
@click.option(
    "--expected-hit-rate", type=float, callback=_share, default=0.9, show_default=True, help="Hit rate to plan for."
)
@click.option("--repeats", type=click.IntRange(1, 1000), help="Repeats of each combination, instead of the above.")
@click.option("--seed", type=click.IntRange(0), default=0, show_default=True, help="Same seed, same order.")
@click.option("--out", type=click.Path(path_type=Path), help="Trial file to write, with robot and floor of --trial.")
@click.option("--json", "as_json", is_flag=True, help="Print JSON instead of the run card.")
def command(sizes: tuple[float, ...], **given: Any) -> None:
    """Print a run card: how often to drive each command, in an order that tells everything apart.

    Every combination of direction, size and start (along or against the turn before) comes equally often, in blocks,
    so that a drift is not mistaken for any of them. With --after, only what is missing after a first batch.
    """
    from calib.plan import Wanted
    from floorswing import planning

    trial, out = given["trial"], given["out"]
    planning.check_out(trial, out)
    if not sizes and trial is not None:
        sizes = planning.sizes_of_trial(trial)
    hit = given["hit_rate_share"]
    wanted = Wanted(
        mean_deg=given["mean_deg"],
        spread_share=given["spread_share"],
        difference_deg=given["difference_deg"],
        detect_deg=given["detect_deg"],
        margin_deg=given["same_within_deg"],
        hit_rate=None if hit is None else (hit, given["expected_hit_rate"]),
    )
    first = planning.read_first_batch(given["after"]) if given["after"] else None
    if wanted.needs_scatter and given["scatter_deg"] is None and first is None:
        raise click.UsageError("--scatter-deg: missing; a width in degrees needs it, or --after DIR to take it from")
    found = planning.plan(
        sizes, wanted, scatter_deg=given["scatter_deg"], after=first, repeats=given["repeats"], seed=given["seed"]
    )
    written = planning.write_planned_trial(trial, out, found.plan) if out is not None and found.plan else None
    if given["as_json"]:
        click.echo(planning.plan_json(found), nl=False)
        return
    _print(found, written, out)


def _print(found: Any, written: Path | None, out: Path | None) -> None:
    from floorswing import planning

    if found.missing:
        click.echo(planning.missing_table(found.missing) + "\n")
    for line in planning.plan_sentences(found):
        click.echo(line)
    if found.plan is not None:
        click.echo("\n" + planning.merit_table(found.plan) + "\n\n" + planning.run_card(found.plan))
    if written is not None:
        click.echo(f"\nWritten to {written}")
    elif found.plan is None and out is not None:
        click.echo(f"No trial file was written to {out}.")
