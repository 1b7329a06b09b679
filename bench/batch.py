"""A batch killed twice: ``python -m bench.batch [--clips 200] [--damaged 3] [--workers 2]``.

Makes short clips out of a bundled one, damages some, measures them all by the command as a user would, kills the
batch twice (signal 9) on the way and starts it again. Prints what the last run says, how often the results of each
clip were written, and whether anything was left over. At the end the table must hold every clip, the damaged ones
failed, and none may have been measured twice.
"""

from __future__ import annotations

import argparse
import re
import subprocess
import sys
import tempfile
import time
from pathlib import Path

from bench.clips import shorten
from floorswing.demo_clips import demo_clips

SECONDS = 5.0


def make_clips(folder: Path, n_clips: int, n_damaged: int) -> Path:
    """Fill ``folder/clips``; return the trial file."""
    (lino,) = (one for one in demo_clips() if one.name == "lino_mixed")
    (folder / "clips").mkdir()
    shorten(lino.clip, SECONDS, folder / "short.mp4")
    content = (folder / "short.mp4").read_bytes()
    for number in range(n_clips):
        damaged = number % max(n_clips // n_damaged, 1) == 1 and number // max(n_clips // n_damaged, 1) < n_damaged
        # A free box of its own makes every clip another file, so that none is taken for another.
        own = content + (16).to_bytes(4, "big") + b"free" + number.to_bytes(8, "big")
        name = f"{'damaged' if damaged else 'clip'}-{number:03d}.mp4"
        (folder / "clips" / name).write_bytes(bytes(4096) + own[4096:] if damaged else own)
    trial = folder / "trial.toml"
    said = lino.trial.read_text(encoding="utf-8").split("[commands]")[0]
    trial.write_text(f"{said}[commands]\nwheel_deg = [95, 190]\n", encoding="utf-8")
    return trial


class Watch:
    """Counts how often the results of each clip appear anew."""

    def __init__(self, out: Path) -> None:
        self._out = out
        self._stamps: dict[str, set[tuple[int, int]]] = {}

    def look(self) -> int:
        """Note what is there now; return the number of clips measured so far."""
        for path in self._out.glob("[!.]*/measurement.json") if self._out.exists() else ():
            try:
                status = path.stat()
            except OSError:
                continue
            self._stamps.setdefault(path.parent.name, set()).add((status.st_ino, status.st_mtime_ns))
        return len(self._stamps)

    @property
    def written(self) -> list[int]:
        """How many times the results of each clip were written."""
        return [len(stamps) for stamps in self._stamps.values()]


def main() -> None:
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--clips", type=int, default=200)
    parser.add_argument("--damaged", type=int, default=3)
    parser.add_argument("--workers", type=int, default=2)
    options = parser.parse_args()
    with tempfile.TemporaryDirectory() as place:
        folder = Path(place)
        trial = make_clips(folder, options.clips, options.damaged)
        out = folder / "out"
        call = [sys.executable, "-m", "floorswing", "measure", str(folder / "clips"), "--trial", str(trial)]
        call += ["--out", str(out), "--workers", str(options.workers)]
        watch = Watch(out)
        for share in (1 / 3, 2 / 3):
            run = subprocess.Popen(call, stdout=subprocess.DEVNULL, stderr=subprocess.DEVNULL)
            while watch.look() < share * options.clips and run.poll() is None:
                time.sleep(0.05)
            run.kill()
            print(f"killed with {watch.look()} clips measured, exit code {run.wait()}", flush=True)
        last = subprocess.Popen(call, stdout=subprocess.PIPE, stderr=subprocess.PIPE, text=True)
        said, complained = last.communicate()
        watch.look()
        table = said[said.rindex(f"{options.clips} clips: ") :].splitlines()
        print("\n".join(table[: 3 + options.damaged]))
        print(f"exit code {last.returncode}; {len(re.findall('^Error: ', complained, re.MULTILINE))} lines of errors")
        print(f"measured twice: {sum(n > 1 for n in watch.written)} of {len(watch.written)} clips")
        print(f"left over: {sorted(path.name for path in out.glob('.*')) or 'nothing'}")


if __name__ == "__main__":
    main()
