"""Speed, memory and scaling, as the tables of docs/performance.md: ``python -m bench.performance [--parts ...]``.

Everything that is compared is run side by side, in turns, and compared within each turn; printed are medians. CPU time
(all threads and processes) stands beside the time on the clock, since other work on the machine spoils the latter.

Parts: ``clips`` (measuring against decoding alone and against the plain script, peak memory), ``start`` (start-up),
``length`` (1, 10, 60 minutes), ``workers`` (8 clips by one worker of one decode thread and by two), ``sparse`` (still
stretches passed over), ``where`` (where the time goes).
"""

from __future__ import annotations

import argparse
import os
import platform
import resource
import statistics
import subprocess
import sys
import tempfile
import time
from collections.abc import Callable
from pathlib import Path

import av
import cv2
import numpy as np

from bench.clips import lengthen
from bench.speed import HERE, decode, plain_script, setup_of
from demo_videos.render import Camera, Drive, Scene, render_clip, spin_motion
from floorswing.clip_job import ClipJob, SeenClip, do_clip
from floorswing.pipeline import measure_clip
from floorswing.workers import run_in_workers
from vision.frames import Clip
from vision.ground import GroundWatcher
from vision.poses import solve_poses
from vision.records import MarkerSetup
from vision.steady import calibrate_steadied, camera_path
from vision.track import track_pair
from vision.turns import split_turns, usable_frames

PARTS = ("clips", "start", "workers", "sparse", "where", "length")
N_CLIPS = 8


def cost(work: Callable[[], object]) -> tuple[float, float]:
    """Return the time on the clock and the CPU time (this process and its children) of some work, in s."""
    cpu_s, start_s = cpu_now_s(), time.perf_counter()
    work()
    return time.perf_counter() - start_s, cpu_now_s() - cpu_s


def cpu_now_s() -> float:
    spent = (resource.getrusage(who) for who in (resource.RUSAGE_SELF, resource.RUSAGE_CHILDREN))
    return sum(usage.ru_utime + usage.ru_stime for usage in spent)


def machine() -> str:
    model = platform.processor() or platform.machine()
    info = Path("/proc/cpuinfo")
    if info.exists():
        names = [
            line.partition(":")[2].strip() for line in info.read_text().splitlines() if line.startswith("model name")
        ]
        model = names[0] if names else model
    memory_gb = os.sysconf("SC_PAGE_SIZE") * os.sysconf("SC_PHYS_PAGES") / 2**30 if hasattr(os, "sysconf") else 0
    return (
        f"{len(os.sched_getaffinity(0))} cores ({model}), {memory_gb:.0f} GiB, {platform.system()}; Python "
        f"{platform.python_version()}, PyAV {av.__version__}, OpenCV {cv2.__version__}, NumPy {np.__version__}"
    )


def peak(clip: Path, trial: Path, *, sparse: bool = False) -> tuple[float, float, float]:
    """Measure in a process of its own; return its peak memory (MB), time on the clock and CPU time (s)."""
    code = (
        "import resource, sys, time\n"
        "from pathlib import Path\n"
        "from bench.speed import setup_of\n"
        "from floorswing.pipeline import measure_clip\n"
        "start = time.perf_counter()\n"
        "measure_clip(sys.argv[1], setup_of(Path(sys.argv[2])), sparse=sys.argv[3] == 'True')\n"
        "use = resource.getrusage(resource.RUSAGE_SELF)\n"
        "print(use.ru_maxrss / 1024, time.perf_counter() - start, use.ru_utime + use.ru_stime)\n"
    )
    call = [sys.executable, "-c", code, str(clip), str(trial), str(sparse)]
    done = subprocess.run(call, capture_output=True, text=True, check=True)
    memory, clock_s, cpu_s = map(float, done.stdout.split())
    return memory, clock_s, cpu_s


def show(title: str, *rows: tuple[str, ...]) -> None:
    """Print a table, the first row being its head."""
    print(f"\n### {title}\n", flush=True)
    widths = [max(len(row[k]) for row in rows) for k in range(len(rows[0]))]
    for number, row in enumerate(rows):
        cells = [row[0].ljust(widths[0]), *(cell.rjust(width) for cell, width in zip(row[1:], widths[1:], strict=True))]
        print(f"| {' | '.join(cells)} |")
        if number == 0:
            print(
                f"| {' | '.join([':' + '-' * (widths[0] - 1), *('-' * (width - 1) + ':' for width in widths[1:])])} |"
            )
    sys.stdout.flush()


def clips_part(pairs: list[tuple[Path, Path]], runs: int) -> None:
    head = (
        "clip",
        "frames",
        "decode s",
        "measure s",
        "plain s",
        "frames/s",
        "measure/decode",
        "(CPU)",
        "plain/measure",
    )
    rows = [(*head, "(CPU)", "peak MB")]
    for clip, trial in pairs:
        setup = setup_of(trial)
        n_frames = decode(clip)
        turns = [
            (
                cost(lambda clip=clip: decode(clip)),
                cost(lambda clip=clip, setup=setup: measure_clip(clip, setup)),
                cost(lambda clip=clip, setup=setup: plain_script(clip, setup.dictionary)),
            )
            for _ in range(runs)
        ]
        clock = [[one[0] for one in turn] for turn in turns]
        cpu = [[one[1] for one in turn] for turn in turns]
        decoding, measuring, plainly = (statistics.median(column) for column in zip(*clock, strict=True))
        ratios = [
            f"{statistics.median(of(d, m, p) for d, m, p in which):.2f}"
            for of in (lambda d, m, p: m / d, lambda d, m, p: p / m)
            for which in (clock, cpu)
        ]
        times = [f"{value:.2f}" for value in (decoding, measuring, plainly)]
        with Clip(clip) as opened:
            info = opened.info
        name = f"{clip.name} ({info.codec}, {info.width_px} x {info.height_px})"
        rows.append(
            (name, str(n_frames), *times, f"{n_frames / measuring:.0f}", *ratios, f"{peak(clip, trial)[0]:.0f}")
        )
    show(f"One clip (medians of {runs} turns)", *rows)


def start_part() -> None:
    call = [sys.executable, "-m", "floorswing", "--version"]
    bare = [sys.executable, "-c", "pass"]
    turns = [
        [cost(lambda line=line: subprocess.run(line, capture_output=True, check=True)) for line in (call, bare)]
        for _ in range(9)
    ]
    clock, cpu = (statistics.median(turn[0][k] for turn in turns) for k in (0, 1))
    show(
        "Start-up (median of 9)",
        ("command", "clock s", "CPU s"),
        ("floorswing --version", f"{clock:.3f}", f"{cpu:.3f}"),
        ("python -c pass", *(f"{statistics.median(turn[1][k] for turn in turns):.3f}" for k in (0, 1))),
    )


def length_part(clip: Path, trial: Path, minutes: list[float], folder: Path) -> None:
    rows = [("length", "frames", "clock s", "CPU s", "CPU ms a frame", "peak MB")]
    for length in minutes:
        long_clip = folder / f"long{clip.suffix}"
        lengthen(clip, 60.0 * length, long_clip)
        with av.open(str(long_clip)) as container:
            n_frames = sum(packet.size > 0 for packet in container.demux(video=0))
        memory, clock_s, cpu_s = peak(long_clip, trial)
        long_clip.unlink()
        figures = (f"{clock_s:.1f}", f"{cpu_s:.1f}", f"{1e3 * cpu_s / n_frames:.2f}", f"{memory:.0f}")
        rows.append((f"{length:g} min", str(n_frames), *figures))
        print(rows[-1], file=sys.stderr, flush=True)
    show("Scaling with length", *rows)


def workers_part(clip: Path, setup: MarkerSetup, runs: int, folder: Path) -> None:
    content = clip.read_bytes()
    jobs = []
    for number in range(N_CLIPS):
        path = folder / f"clip-{number}{clip.suffix}"
        path.write_bytes(content)
        jobs.append(ClipJob(
            name=path.stem, clip=path, setup=setup, sparse=False, threads=1, asked="", known="", asked_by=""
        ))  # fmt: skip

    def run(n_workers: int) -> None:
        outcomes = [outcome for _, outcome in run_in_workers(do_clip, jobs, n_workers)]
        assert all(isinstance(outcome, SeenClip) for outcome in outcomes), outcomes

    turns = [(cost(lambda: run(1)), cost(lambda: run(2))) for _ in range(runs)]
    rows = [("workers, one decode thread each", "clock s", "CPU s", "clips a minute")]
    for number, name in enumerate(("1", "2")):
        clock, cpu = (statistics.median(turn[number][k] for turn in turns) for k in (0, 1))
        rows.append((name, f"{clock:.1f}", f"{cpu:.1f}", f"{60.0 * N_CLIPS / clock:.1f}"))
    ratio = statistics.median(one[0] / two[0] for one, two in turns)
    show(f"Workers: {N_CLIPS} clips (medians of {runs} turns; 2 workers {ratio:.2f} times as fast)", *rows)


def rested_clip(folder: Path) -> tuple[Path, Path]:
    """Render a clip at 17 Mbit/s, a key frame each second, in which the robot rests half of the time, 8 s at a time."""
    path, trial = folder / "rested.mp4", folder / "rested.toml"
    motion = spin_motion([2000.0, -2000.0], drive=Drive(rate_wheel_deg_s=250.0), rest_s=8.0, start_delay_s=0.5)
    render_clip(Scene(camera=Camera(tilt_deg=12.0, k1=-0.05), seed=4), motion, path, bitrate=17_000_000, gop=30)
    trial.write_text((HERE / "lino_mixed.toml").read_text(encoding="utf-8"), encoding="utf-8")
    return path, trial


def sparse_part(clip: Path, trial: Path, runs: int) -> None:
    setup = setup_of(trial)
    turns = [
        (
            cost(lambda: decode(clip)),
            cost(lambda: measure_clip(clip, setup)),
            cost(lambda: measure_clip(clip, setup, sparse=True)),
        )
        for _ in range(runs)
    ]
    whole, few = measure_clip(clip, setup), measure_clip(clip, setup, sparse=True)
    u_ratio = [b.u_heading_change_deg / a.u_heading_change_deg for a, b in zip(whole.turns, few.turns, strict=False)]
    rows = [("against decoding alone", "clock", "CPU")]
    for name, place in (("measuring, every frame", 1), ("measuring, still stretches passed over", 2)):
        ratios = [statistics.median(turn[place][k] / turn[0][k] for turn in turns) for k in (0, 1)]
        rows.append((name, *(f"{ratio:.2f}" for ratio in ratios)))
    n_frames = (len(whole.track.time_s), len(few.track.time_s))
    same = "the same" if len(whole.turns) == len(few.turns) else "OTHER"
    show(
        f"Still stretches passed over: {clip.name}, {n_frames[1]} of {n_frames[0]} frames decoded, {same} "
        f"{len(few.turns)} turns, u {statistics.median(u_ratio):.2f} times as large (medians of {runs} turns)",
        *rows,
    )


def where_part(clip: Path, setup: MarkerSetup) -> None:
    """Run the stages of `floorswing.pipeline` one by one."""
    spent: list[tuple[str, float]] = []

    def stage(name: str, work: Callable[[], object]) -> object:
        result: list[object] = []
        spent.append((name, cost(lambda: result.append(work()))[1]))
        return result[0]

    stage("decoding", lambda: decode(clip))
    ground = GroundWatcher()
    with Clip(clip) as opened:
        corners = stage("following the markers", lambda: track_pair(opened.frames(), setup))
    with Clip(clip) as opened:
        stage("watching the floor", lambda: sum(1 for _ in ground.passing(opened.frames())))
    decoding_s = spent[0][1]
    spent[1:] = [(name, max(value - decoding_s, 0.0)) for name, value in spent[1:]]
    seen_path = stage("camera", lambda: camera_path(corners, ground.path()))
    corners, calibration = stage("plane and lens", lambda: calibrate_steadied(corners, seen_path))
    poses = stage("poses", lambda: solve_poses(corners, calibration))
    stage("turns and uncertainty", lambda: split_turns(usable_frames(corners, poses), calibration.cov))
    total = sum(value for _, value in spent)
    rows = [("stage", "CPU s", "share")]
    rows += [(name, f"{value:.2f}", f"{100 * value / total:.0f} %") for name, value in spent]
    show(f"Where the time goes: {clip.name}", *rows, ("all", f"{total:.2f}", "100 %"))


def main() -> None:
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("--parts", default=",".join(PARTS), help="which, with commas between them")
    parser.add_argument("--runs", type=int, default=3)
    parser.add_argument("--minutes", default="1,10,60", help="lengths of the long clips")
    parser.add_argument("--also", nargs=2, type=Path, action="append", default=[], metavar=("CLIP", "TRIAL"))
    parser.add_argument(
        "--rested", nargs=2, type=Path, metavar=("CLIP", "TRIAL"), help="clip for the part sparse; default: rendered"
    )
    options = parser.parse_args()
    clip, trial = HERE / "lino_mixed.mp4", HERE / "lino_mixed.toml"
    setup = setup_of(trial)
    print(machine())
    with tempfile.TemporaryDirectory() as place:
        for part in options.parts.split(","):
            if part == "clips":
                clips_part([(clip, trial), *map(tuple, options.also)], options.runs)
            elif part == "start":
                start_part()
            elif part == "length":
                length_part(clip, trial, [float(value) for value in options.minutes.split(",")], Path(place))
            elif part == "workers":
                workers_part(clip, setup, options.runs, Path(place))
            elif part == "sparse":
                sparse_part(*(options.rested or rested_clip(Path(place))), options.runs)
            elif part == "where":
                where_part(clip, setup)
            else:
                parser.error(f"{part}: no such part; accepted: {', '.join(PARTS)}")


if __name__ == "__main__":
    main()
