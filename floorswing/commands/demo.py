"""``floorswing demo``: the main job on the bundled clips."""

from __future__ import annotations

import shlex
import time
from pathlib import Path
from typing import TYPE_CHECKING

import click

from floorswing.errors import FloorswingError
from floorswing.keys import listed

if TYPE_CHECKING:
    from floorswing.demo_clips import DemoClip

FOLDER = Path("floorswing-demo")
ANGLES = ("90", "-90")


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
@click.pass_context
def command(ctx: click.Context, out: Path, names: tuple[str, ...], overwrite: bool) -> None:
    """Measure the clips that come with the tool, fit them, and say what to command.

    The clips are rendered, with carts that slip by chance, lens distortion, noise and coding as from a phone;
    so the true heading changes are known, and the demo says how far the measured ones are from them. Each
    step is shown as the command that you would type.
    """
    from floorswing.demo import new_folder

    chosen = _chosen(names)
    folder = new_folder(out, overwrite=overwrite)
    started_s = time.monotonic()
    for clip in chosen:
        _show(ctx, clip, folder)
    click.echo(_closing(chosen, folder, time.monotonic() - started_s))


def _chosen(names: tuple[str, ...]) -> list[DemoClip]:
    """Return the bundled clips of these names, or all."""
    from floorswing.demo_clips import demo_clips

    known = {clip.name: clip for clip in demo_clips()}
    for name in names:
        if name not in known:
            raise FloorswingError(f"no bundled clip {name!r}; accepted: {listed(list(known))}")
    return [known[name] for name in dict.fromkeys(names)] if names else list(known.values())


def _show(ctx: click.Context, clip: DemoClip, out: Path) -> None:
    """Run the commands on one clip, showing each."""
    from floorswing.commands.command import command as command_for_angles
    from floorswing.commands.fit import command as fit
    from floorswing.commands.measure import command as measure
    from floorswing.demo import check_demo, truth_sentence
    from floorswing.trial import read_trial

    trial = read_trial(clip.trial)
    folder = out / clip.name
    click.echo(f"== {clip.name}: {trial.robot.name} on {trial.floor.surface} ==\n")
    _prompt("measure", clip.clip, "--trial", clip.trial, "--out", out)
    ctx.invoke(measure, clips=(clip.clip,), trial=clip.trial, out=out, continued=False, as_json=False)
    click.echo(truth_sentence(check_demo(clip, out)) + "\n")
    _prompt("fit", folder)
    ctx.invoke(fit, folders=(folder,), out=None, as_json=False)
    click.echo()
    _prompt("command", "--fit", folder / "fit.json", *ANGLES)
    ctx.invoke(command_for_angles, fit_file=folder / "fit.json", as_json=False, angles=ANGLES)
    click.echo("\n")


def _prompt(*words: object) -> None:
    click.echo(f"$ floorswing {shlex.join(map(str, words))}")


def _closing(clips: list[DemoClip], out: Path, seconds: float) -> str:
    first = clips[0]
    folder = out / first.name
    return "\n".join(
        [
            f"Done in {seconds:.0f} s. What to look at:",
            f"- {first.clip}: the clip, in any player",
            f"- {folder / 'turns.csv'}: its turns, one row each, in any spreadsheet",
            f"- {folder / 'heading.csv'}: the heading in every frame",
            f"- {folder / 'measurement.json'}: settings, plane, uncertainty budget",
            f"- {folder / 'fit.json'}: the fitted relation with every interval",
        ]
    )
