"""Cost of measuring a clip against decoding it: ``python -m bench.speed [--runs 3] [--minutes 10] [CLIP TRIAL]``.

Printed side by side from one run: time to decode the clip's luma alone with PyAV, time of the whole measurement, time
of the script that anybody would write (OpenCV capture, detection on every full frame, sub-pixel corners), ratios as
medians of paired runs, and the peak memory on the clip and on a long one made of copies of it. Then what following
the markers alone costs on frames that are decoded already, at rest and in motion, and one comparison of both patterns.
"""

from __future__ import annotations

import argparse
import platform
import resource
import statistics
import subprocess
import sys
import tempfile
import time
from pathlib import Path

import av
import cv2
import numpy as np

from bench.clips import lengthen
from floorswing.pipeline import measure_clip
from floorswing.trial import read_trial
from vision.align import fit_corners
from vision.frames import Clip
from vision.pair import build_pattern, mean_side_px, pair_modules
from vision.records import MarkerSetup
from vision.track import PairTracker, find_pair, one_thread

HERE = Path(__file__).resolve().parent.parent / "demo_videos"


def setup_of(trial_path: Path) -> MarkerSetup:
    trial = read_trial(trial_path)
    first, last = trial.markers.cards
    return MarkerSetup(
        dictionary=trial.markers.dictionary,
        fore_id=trial.markers.fore,
        aft_id=trial.markers.aft,
        card_ids=tuple(range(first, last + 1)),
        marker_side_mm=trial.robot.marker_side_mm,
        card_side_mm=trial.floor.card_side_mm,
    )


def decode(clip: Path) -> int:
    """Decode all luma with PyAV and touch it; return the number of frames."""
    n_frames = 0
    with av.open(str(clip)) as container:
        container.streams.video[0].thread_type = "AUTO"
        for frame in container.decode(video=0):
            np.frombuffer(frame.planes[0], np.uint8)[::4096].sum()
            n_frames += 1
    return n_frames


def plain_script(clip: Path, dictionary: str) -> int:
    """Detect the markers in every full frame with sub-pixel corners; return the number of frames."""
    settings = cv2.aruco.DetectorParameters()
    settings.cornerRefinementMethod = cv2.aruco.CORNER_REFINE_SUBPIX
    source = cv2.aruco.getPredefinedDictionary(getattr(cv2.aruco, f"DICT_{dictionary}"))
    detector = cv2.aruco.ArucoDetector(source, settings)
    capture, n_frames = cv2.VideoCapture(str(clip)), 0
    while True:
        known, picture = capture.read()
        if not known:
            return n_frames
        detector.detectMarkers(cv2.cvtColor(picture, cv2.COLOR_BGR2GRAY))
        n_frames += 1


def peak_mb(clip: Path, trial: Path) -> tuple[float, float]:
    """Measure in a process of its own; return its peak memory in MB and its time in s."""
    code = (
        "import resource, sys, time\n"
        "from pathlib import Path\n"
        "from bench.speed import setup_of\n"
        "from floorswing.pipeline import measure_clip\n"
        "start = time.perf_counter()\n"
        "measure_clip(sys.argv[1], setup_of(Path(sys.argv[2])))\n"
        "print(resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / 1024, time.perf_counter() - start)\n"
    )
    done = subprocess.run(
        [sys.executable, "-c", code, str(clip), str(trial)], capture_output=True, text=True, check=True
    )
    memory, seconds = done.stdout.split()
    return float(memory), float(seconds)


def following_ms(clip: Path, setup: MarkerSetup) -> tuple[float, float, float, float]:
    """Return the time (ms a frame, medians) of resting and moving frames, of one comparison, and the side (px)."""
    tracker: PairTracker | None = None
    rest, moving, compared, side_px = [], [], [], np.nan
    with Clip(clip) as opened, one_thread():
        for frame in opened.frames():
            if tracker is None:
                corners_px, _ = find_pair(frame.luma, setup)
                if corners_px is not None:
                    tracker, last_px = PairTracker(setup, frame.luma, corners_px), corners_px
                continue
            start = time.perf_counter()
            sight = tracker.see(frame)
            spent_ms = 1e3 * (time.perf_counter() - start)
            if not np.all(np.isfinite(sight.corners_px)):
                continue
            if frame.index % 10 == 0:
                side_px = float(np.mean([mean_side_px(corners) for corners in sight.corners_px]))
                compared.append(comparison_ms(frame.luma, sight.corners_px, setup, tracker))
            (moving if moved_px(sight.corners_px, last_px) > 0.5 else rest).append(spent_ms)
            last_px = sight.corners_px
    return statistics.median(rest), statistics.median(moving or [np.nan]), statistics.median(compared), side_px


def moved_px(corners_px: np.ndarray, before_px: np.ndarray) -> float:
    return float(np.abs(corners_px - before_px).max())


def comparison_ms(luma: np.ndarray, corners_px: np.ndarray, setup: MarkerSetup, tracker: PairTracker) -> float:
    """Return the time of one Gauss-Newton comparison of both patterns with a frame."""
    patterns = [
        build_pattern(black, mean_side_px(corners), tracker.optics)
        for black, corners in zip(pair_modules(setup), corners_px, strict=True)
    ]
    start = time.perf_counter()
    for corners, pattern in zip(corners_px, patterns, strict=True):
        fit_corners(luma, corners, pattern.sharp)
    return 1e3 * (time.perf_counter() - start)


def timed(work: object) -> float:
    start = time.perf_counter()
    work()  # type: ignore[operator]
    return time.perf_counter() - start


def main() -> None:
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("files", nargs="*", type=Path, metavar="CLIP TRIAL")
    parser.add_argument("--runs", type=int, default=3)
    parser.add_argument("--minutes", type=float, default=10.0, help="length of the long clip; 0 leaves it out")
    options = parser.parse_args()
    clip, trial = options.files or (HERE / "lino_mixed.mp4", HERE / "lino_mixed.toml")
    setup = setup_of(trial)
    print(f"{platform.machine()}, Python {platform.python_version()}, PyAV {av.__version__}, OpenCV {cv2.__version__}")
    n_frames = decode(clip)
    print(f"{clip.name}: {n_frames} frames, {clip.stat().st_size / 1e6:.1f} MB")
    rows = [
        (
            timed(lambda: decode(clip)),
            timed(lambda: measure_clip(clip, setup)),
            timed(lambda: plain_script(clip, setup.dictionary)),
        )
        for _ in range(options.runs)
    ]
    decoding, measuring, plainly = (statistics.median(column) for column in zip(*rows, strict=True))
    print(f"decode luma alone         {decoding:7.2f} s  {1e3 * decoding / n_frames:6.2f} ms a frame")
    print(f"measure                   {measuring:7.2f} s  {1e3 * measuring / n_frames:6.2f} ms a frame")
    print(f"plain script              {plainly:7.2f} s  {1e3 * plainly / n_frames:6.2f} ms a frame")
    print(f"measure / decode          {statistics.median(m / d for d, m, _ in rows):7.2f}    (paired median)")
    print(f"plain script / measure    {statistics.median(p / m for _, m, p in rows):7.2f}    (paired median)")
    still_ms, moving_ms, once_ms, side_px = following_ms(clip, setup)
    decode_ms = 1e3 * decoding / n_frames
    print(f"following, at rest        {still_ms:7.2f} ms a frame, {still_ms / decode_ms:4.2f} of decoding")
    print(f"following, in motion      {moving_ms:7.2f} ms a frame, {moving_ms / decode_ms:4.2f} of decoding")
    print(f"one comparison of both    {once_ms:7.2f} ms, markers {side_px:.0f} px (asked: at most 1.0 ms at 45 px)")
    memory, _ = peak_mb(clip, trial)
    print(f"peak memory               {memory:7.0f} MB")
    if options.minutes > 0:
        with tempfile.TemporaryDirectory() as folder:
            long_clip = Path(folder) / f"long{clip.suffix}"
            lengthen(clip, 60.0 * options.minutes, long_clip)
            memory, seconds = peak_mb(long_clip, trial)
            print(f"peak memory, {options.minutes:g} minutes   {memory:7.0f} MB  in {seconds:.0f} s")
    print(f"this process              {resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / 1024:7.0f} MB")


if __name__ == "__main__":
    main()
