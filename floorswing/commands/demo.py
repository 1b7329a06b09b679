"""``floorswing demo``: the main job on the bundled clips."""

from __future__ import annotations

import time
from pathlib import Path
from typing import TYPE_CHECKING

import click

from floorswing.errors import FloorswingError, one_line
from floorswing.keys import listed
from floorswing.progress import Bars

if TYPE_CHECKING:
    from floorswing.demo_clips import DemoClip

FOLDER = Path("floorswing-demo")


@click.command(short_help="Run the main job on the bundled clips and compare with the truth.")
@click.option(
    "--out",
    type=click.Path(path_type=Path),
    default=FOLDER,
    show_default=True,
    help="Folder to write into, made in the current folder.",
)
@click.option("--clip", "names", multiple=True, help="Only this clip; may be given again.  [default: all]")
@click.option("--overwrite", is_flag=True, help="Replace what an earlier demo wrote there.")
def command(out: Path, names: tuple[str, ...], overwrite: bool) -> None:
    """Measure the clips that come with the tool and show the results.

    The clips are rendered, with carts that slip by chance, lens distortion, noise and coding as from a phone;
    so the true heading changes are known, and the demo says how far the measured ones are from them.
    """
    from floorswing.demo import measure_demo, new_folder, truth_sentence
    from floorswing.summary import sentence, turns_table

    chosen = _chosen(names)
    folder = new_folder(out, overwrite=overwrite)
    click.echo(f"Measuring {_count(len(chosen))} into {folder}/\n")
    started_s = time.monotonic()
    for clip in chosen:
        with Bars() as progress:
            result = measure_demo(clip, folder, progress)
        for warning in result.measurement.warnings:
            click.echo(f"Warning: {clip.name}: {one_line(warning)}", err=True)
        trial = result.measurement.trial
        click.echo(f"{clip.name}: {trial.robot.name} on {trial.floor.surface}")
        click.echo(turns_table(result.measurement.turns))
        click.echo(sentence(result.measurement))
        click.echo(truth_sentence(result.check) + "\n")
    click.echo(_closing(chosen, folder, time.monotonic() - started_s))


def _chosen(names: tuple[str, ...]) -> list[DemoClip]:
    """Return the bundled clips of these names, or all."""
    from floorswing.demo_clips import demo_clips

    known = {clip.name: clip for clip in demo_clips()}
    for name in names:
        if name not in known:
            raise FloorswingError(f"no bundled clip {name!r}; accepted: {listed(list(known))}")
    return [known[name] for name in dict.fromkeys(names)] if names else list(known.values())


def _count(number: int) -> str:
    return "one bundled clip" if number == 1 else f"{number} bundled clips"


def _closing(clips: list[DemoClip], folder: Path, seconds: float) -> str:
    first = clips[0]
    return "\n".join(
        [
            f"Done in {seconds:.0f} s. What to look at:",
            f"- {first.clip}: the clip, in any player",
            f"- {folder / first.name / 'turns.csv'}: its turns, one row each, in any spreadsheet",
            f"- {folder / first.name / 'heading.csv'}: the heading in every frame",
            f"- {folder / first.name / 'measurement.json'}: settings, plane, uncertainty budget",
        ]
    )
