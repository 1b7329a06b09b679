"""What a report costs: seconds of the processor and of the clock, bytes, and where they go.

Run as ``python -m bench.report FOLDER...`` on folders that ``floorswing measure`` wrote, their clips in place. Decoding
runs in threads of its own, so seconds of the processor can exceed those of the clock.
"""

from __future__ import annotations

import argparse
import platform
import re
import tempfile
import time
from pathlib import Path

from floorswing.report.making import write_report


def parts(page: str) -> dict[str, int]:
    """Return the bytes of the page by what they are for."""
    stills = sum(map(len, re.findall(r'href="data:image/jpeg[^"]*"', page)))
    files = sum(map(len, re.findall(r'href="data:(?:text|application)[^"]*"', page)))
    plots = sum(map(len, re.findall(r'<div class="scroll"[^>]*><svg .*?</svg>', page, flags=re.DOTALL)))
    return {"stills": stills, "plots": plots, "files inside": files, "the rest": len(page) - stills - files - plots}


def main() -> None:
    """Write the report and print what it cost."""
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("folders", nargs="+", type=Path)
    folders = parser.parse_args().folders
    with tempfile.TemporaryDirectory() as place:
        wall_s, busy_s = time.monotonic(), time.process_time()
        written = write_report(folders, Path(place) / "report.html")
        wall_s, busy_s = time.monotonic() - wall_s, time.process_time() - busy_s
        page = written.path.read_text(encoding="utf-8")
    n_turns = sum(len(subject.seen) for subject in written.subjects)
    print(f"Python {platform.python_version()}, {platform.machine()}")
    n_stills = page.count("<symbol")
    print(f"{n_turns} turns, {n_stills} stills: {wall_s:.1f} s of the clock, {busy_s:.1f} s of the processor")
    shares = ", ".join(f"{name} {size / 1e6:.2f}" for name, size in parts(page).items())
    print(f"{written.size / 1e6:.2f} MB: {shares}")
    for said in written.without_pictures:
        print(f"without pictures: {said}")


if __name__ == "__main__":
    main()
