"""Where the bundled clips are: beside the package, in a clone as in an installation."""

from __future__ import annotations

from dataclasses import dataclass
from pathlib import Path

from floorswing.errors import FileError

FOLDER = "demo_videos"


@dataclass(frozen=True, kw_only=True, slots=True)
class DemoClip:
    """A bundled clip with its trial file and its truth."""

    clip: Path
    trial: Path
    truth: Path

    @property
    def name(self) -> str:
        """Name of the clip."""
        return self.clip.stem


def demo_clips(folder: Path | None = None) -> tuple[DemoClip, ...]:
    """Return the bundled clips.

    Parameters
    ----------
    folder : Path, optional
        Where to look; by default the folder that is installed beside this package.

    Raises
    ------
    FileError
        If they are not there.
    """
    place = folder or Path(__file__).resolve().parent.parent / FOLDER
    clips = sorted(place.glob("*.mp4"))
    found = tuple(
        DemoClip(clip=clip, trial=clip.with_suffix(".toml"), truth=clip.with_suffix(".truth.csv"))
        for clip in clips
    )
    missing = [path for one in found for path in (one.trial, one.truth) if not path.is_file()]
    if missing or not found:
        raise FileError(f"{missing[0] if missing else place}: the bundled clips are not there; install again")
    return found
