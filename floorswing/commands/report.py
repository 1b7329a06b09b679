"""``floorswing report``: the answer, the pictures and the evidence on one page."""

from __future__ import annotations

import math
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path
from typing import TYPE_CHECKING

import click

from floorswing.progress import Bar

if TYPE_CHECKING:
    from floorswing.report.making import Progress


@click.command(short_help="Write the report: answer, pictures, evidence and record on one page.")
@click.argument("folders", nargs=-1, required=True, type=click.Path(path_type=Path), metavar="DIR...")
@click.option("--out", type=click.Path(path_type=Path), help="File to write.  [default: report.html in the first DIR]")
@click.option("--clips", type=click.Path(path_type=Path), help="Folder where the clips are now, if they were moved.")
@click.option("--overlay", is_flag=True, help="Also write each clip with outlines, heading and change drawn in.")
@click.option(
    "--margin-deg", type=float, default=1.0, show_default=True, help="Difference of heading that does not matter."
)
def command(folders: tuple[Path, ...], out: Path | None, clips: Path | None, overlay: bool, margin_deg: float) -> None:
    """Write a report on the measured clips in each DIR: folders that `measure` wrote, or folders of these.

    The page is one HTML file that needs nothing else: it opens from a mail and prints. Clips of one robot on one
    surface are fitted together; several robots or surfaces are compared. The stills are taken from the clips, if they
    are still where they were measured.
    """
    from floorswing.report.making import write_report

    if not (math.isfinite(margin_deg) and margin_deg > 0.0):
        raise click.UsageError(f"--margin-deg: found {margin_deg:g}; accepted: degrees above 0")
    with _bars() as progress:
        written = write_report(folders, out, clips=clips, overlay=overlay, margin_deg=margin_deg, progress=progress)
    for said in written.without_pictures:
        click.echo(f"Warning: {said}", err=True)
    n_turns = sum(len(subject.seen) for subject in written.subjects)
    click.echo(f"{n_turns} turns; {written.size / 1e6:.1f} MB")
    for path in (written.path, *written.overlays):
        click.echo(f"Written to {path}")


@contextmanager
def _bars() -> Iterator[Progress]:
    """Yield what shows a bar for one piece of work after the other."""
    open_bars: dict[str, Bar] = {}

    def told(what: str, share: float) -> None:
        if what not in open_bars:
            close()
            open_bars[what] = Bar(what)
        open_bars[what](share)

    def close() -> None:
        for bar in open_bars.values():
            bar.__exit__(None, None, None)
        open_bars.clear()

    try:
        yield told
    finally:
        close()
