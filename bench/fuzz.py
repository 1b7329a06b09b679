"""Damaged clips and trial files: ``python -m bench.fuzz [--clips 2000] [--trials 5000] [--seed 1]``.

Tiny rendered clips, in several containers and codecs, are damaged (bits flipped, bytes lost or repeated, headers of one
spliced into another, lengths forged), given awkward names, and measured through the command line; trial files and
commands files are damaged likewise and read. Asked: exit code 0, 1 or 2 with one line a complaint, never a traceback,
nothing longer than 20 s, nothing written outside the output folder. Everything follows from the seed.

Batches run in child processes, so that a crash or a hang in a decoder is seen and counted; the child's memory is
limited, so that a forged size is seen too.
"""

from __future__ import annotations

import argparse
import collections
import json
import os
import queue
import resource
import shutil
import subprocess
import sys
import tempfile
import threading
import time
import traceback
from collections.abc import Callable, Iterator, Mapping, Sequence
from dataclasses import asdict, dataclass
from pathlib import Path

import numpy as np

LONGEST_S = 20.0
"""Asked: no clip takes longer."""

MOST_BYTES = 4_000_000_000
"""Address space of a child; forged sizes run into it."""

BATCH = 100

PROGRAM_FAILED = "the program failed on it"
"""How a batch tells of an error of ours, so that the other clips are measured all the same."""

CLIP_KINDS = {"mp4": "h264", "mkv": "h264", "mov": "hevc", "webm": "vp9", "avi": "mjpeg"}
NAMES = (
    "clip",
    "-rf",
    "..",
    "a b",
    "über",
    "CON",
    "x" * 200,
    "semi;colon",
    "$(id)",
    "new\nline",
    "\x1b[31m",
    "...",
    "~",
)
"""Stems of file names: shells, terminals and file systems each dislike some of them."""

TRIAL = """\
[robot]
name = "shuttle"
wheel_diameter_mm = 64.0
inner_track_mm = 118.0
tyre_width_mm = 20.0
marker_side_mm = 40.0

[markers]
dictionary = "APRILTAG_36h11"
fore = 0
aft = 1
cards = [10, 29]

[floor]
surface = "cork tile"
card_side_mm = 60.0

[commands]
wheel_deg = [190, -190]
"""
COMMANDS = 'wheel_deg,speed,note\n190,slow,a\n-190,fast,\n280,slow,"b, c"\n'


@dataclass(frozen=True, kw_only=True)
class Outcome:
    """What became of one damaged file."""

    number: int
    damage: str
    ending: str
    """``measured``, ``refused``, or what must not be: ``traceback``, ``several lines``, ``stray files``, ..."""
    detail: str = ""
    seconds: float = 0.0

    @property
    def right(self) -> bool:
        """Whether it ended as it should."""
        return self.ending in ("measured", "refused") and self.seconds <= LONGEST_S


# --- damage ---


Bytes = bytearray
Damage = Callable[[Bytes, Mapping[str, bytes], np.random.Generator], Bytes]


def bit_flips(data: Bytes, _: Mapping[str, bytes], rng: np.random.Generator) -> Bytes:
    """Flip some bits anywhere, from one to several hundred."""
    for place in rng.integers(0, len(data), int(2 ** rng.uniform(0, 9))):
        data[place] ^= 1 << int(rng.integers(0, 8))
    return data


def header_flips(data: Bytes, _: Mapping[str, bytes], rng: np.random.Generator) -> Bytes:
    """Flip bits in the first and last kilobytes, where headers and indexes are."""
    reach = min(3000, len(data) // 2)
    for place in rng.integers(-reach, reach, int(2 ** rng.uniform(0, 6))):
        data[place] ^= 1 << int(rng.integers(0, 8))
    return data


def truncation(data: Bytes, _: Mapping[str, bytes], rng: np.random.Generator) -> Bytes:
    """Keep only the beginning, or only the end."""
    cut = int(rng.integers(0, len(data)))
    return data[:cut] if rng.random() < 0.8 else data[cut:]


def spliced(data: Bytes, bases: Mapping[str, bytes], rng: np.random.Generator) -> Bytes:
    """Put the beginning of one file before the end of another."""
    other = bases[str(rng.choice(sorted(bases)))]
    share = rng.uniform(0.0, 1.0) if rng.random() < 0.5 else rng.uniform(0.0, 0.02)
    return data[: int(share * len(data))] + Bytes(other[int(share * len(other)) :])


def garbage(data: Bytes, _: Mapping[str, bytes], rng: np.random.Generator) -> Bytes:
    """Overwrite a stretch with noise, zeros or ones."""
    start = int(rng.integers(0, len(data)))
    span = min(int(2 ** rng.uniform(2, 14)), len(data) - start)
    filling = (rng.bytes(span), bytes(span), b"\xff" * span)[int(rng.integers(0, 3))]
    data[start : start + span] = filling
    return data


def forged_lengths(data: Bytes, _: Mapping[str, bytes], rng: np.random.Generator) -> Bytes:
    """Write great, small and negative numbers over four or eight bytes, mostly near the headers."""
    extremes = (0, 1, 2, 7, 8, 0x7FFFFFFF, 0x80000000, 0xFFFFFFFF, 0xFFFF, 0x10000, 0x40000000)
    for _k in range(int(rng.integers(1, 6))):
        near_s = rng.random() < 0.7
        place = int(rng.integers(0, min(2500, len(data)) if near_s else len(data)))
        value = int(extremes[int(rng.integers(0, len(extremes)))])
        data[place : place + 4] = value.to_bytes(4, "big" if rng.random() < 0.7 else "little")
    return data


def lost_and_repeated(data: Bytes, _: Mapping[str, bytes], rng: np.random.Generator) -> Bytes:
    """Leave out a stretch, or say it twice."""
    start, span = int(rng.integers(0, len(data))), int(2 ** rng.uniform(0, 13))
    piece = data[start : start + span]
    return data[:start] + (piece * 2 if rng.random() < 0.5 else Bytes()) + data[start + span :]


CLIP_DAMAGE: tuple[Damage, ...] = (
    bit_flips,
    header_flips,
    truncation,
    spliced,
    garbage,
    forged_lengths,
    lost_and_repeated,
)


def damaged_clip(bases: Mapping[str, bytes], seed: int, number: int) -> tuple[str, bytes, str]:
    """Return the name, the bytes and the damage of one clip."""
    rng = np.random.default_rng([seed, 1, number])
    ending = str(rng.choice(sorted(bases)))
    data, done = Bytes(bases[ending]), []
    for _k in range(1 if rng.random() < 0.7 else 2):
        damage = CLIP_DAMAGE[int(rng.integers(0, len(CLIP_DAMAGE)))]
        if data:
            data = damage(data, bases, rng)
            done.append(damage.__name__)
    stem = NAMES[int(rng.integers(0, len(NAMES)))] if rng.random() < 0.3 else "clip"
    return f"{stem}.{ending}", bytes(data), f"{ending}: " + ", ".join(done)


SNIPPETS = (
    "nan", "inf", "-inf", "1e999", "-0.0", "0", "-1", "1e-320", "9" * 400, "0x7fffffff", "true", '""', "''", "[]",
    "{}", '"../../../outside"', '"/dev/zero"', '"/dev/null"', '"a\\u0000b"', '"\\U0001F6D2"', '"""x\n', "[[[[[[[[",
    "=", "\n[robot]\n", "\n[robot.x]\n", 'file = "commands.csv"', 'file = "."', 'file = "trial.toml"',
    'file = "/dev/zero"', 'file = "/dev/stdin"', 'file = "pipe"', "1979-05-27", "_", "#", "\\", "\x00", "\ufeff",
    "[190, [190]]", "[" * 2000, "{a={a={a={a=1}}}}", "wheel_deg = 5", "\u202e", "\r",
)  # fmt: skip


def damaged_trial(seed: int, number: int) -> tuple[bytes, bytes, str]:
    """Return the bytes of a trial file and of its commands file, and the damage."""
    rng = np.random.default_rng([seed, 2, number])
    trial, commands = TRIAL.encode(), COMMANDS.encode()
    in_commands = rng.random() < 0.25
    if in_commands or rng.random() < 0.1:
        trial = trial.replace(b"wheel_deg = [190, -190]", b'file = "commands.csv"')
    target, done = Bytes(commands if in_commands else trial), []
    for _k in range(int(rng.integers(1, 4))):
        target, how = _text_damage(target, rng)
        done.append(how)
    where = "commands" if in_commands else "trial"
    pair = (trial, bytes(target)) if in_commands else (bytes(target), commands)
    return *pair, f"{where}: " + ", ".join(done)


def _text_damage(data: Bytes, rng: np.random.Generator) -> tuple[Bytes, str]:
    kind = int(rng.integers(0, 7))
    lines = bytes(data).split(b"\n")
    at = int(rng.integers(0, len(lines)))
    if kind == 0 and data:
        return bit_flips(data, {}, rng), "bits"
    if kind == 1 and data:
        return truncation(data, {}, rng), "cut"
    if kind == 2:
        lines.pop(at)
        return Bytes(b"\n".join(lines)), "line lost"
    if kind == 3:
        lines.insert(int(rng.integers(0, len(lines))), lines[at])
        return Bytes(b"\n".join(lines)), "line twice"
    snippet = SNIPPETS[int(rng.integers(0, len(SNIPPETS)))].encode("utf-8", "surrogatepass")
    if kind == 4 and b"=" in lines[at]:
        whole = snippet.startswith(b"file = ")
        lines[at] = snippet if whole else lines[at].split(b"=")[0] + b"= " + snippet
        return Bytes(b"\n".join(lines)), "value"
    if kind == 5:
        place = int(rng.integers(0, len(data) + 1))
        return data[:place] + snippet + data[place:], "inserted"
    if data:
        return lost_and_repeated(data, {}, rng), "bytes"
    return Bytes(snippet), "replaced"


# --- one case, in the child ---


def base_clips(folder: Path, endings: Sequence[str] = tuple(CLIP_KINDS)) -> dict[str, bytes]:
    """Return a tiny clip of two turns in every container, by its ending."""
    from demo_videos.render import Camera, Drive, Scene, Timing, render_clip, spin_motion

    scene = Scene(
        camera=Camera(width_px=384, height_px=288, focal_px=560.0, distance_mm=800.0), timing=Timing(fps=15.0)
    )
    drive = Drive(rate_wheel_deg_s=700.0, acceleration_wheel_deg_s2=4000.0)
    motion = spin_motion([120.0, -120.0], drive=drive, rest_s=0.5, start_delay_s=0.4, seed=2)
    found = {}
    for ending in endings:
        codec = CLIP_KINDS[ending]
        path = folder / f"base.{ending}"
        if not path.exists():
            render_clip(scene, motion, path, codec=codec, bitrate=None if codec == "mjpeg" else 400_000, gop=8)
        found[ending] = path.read_bytes()
    return found


def try_clip(name: str, data: bytes, damage: str, number: int, sandbox: Path) -> Outcome:
    """Measure one damaged clip through the command line, in a folder of its own."""
    for inner in ("in", "out", "cwd", "tmp", "home"):
        (sandbox / inner).mkdir(parents=True)
    clip, trial = sandbox / "in" / name, sandbox / "trial.toml"
    trial.write_text(TRIAL, encoding="utf-8")
    clip.write_bytes(data)
    before = everything(sandbox)
    start = time.monotonic()
    code, said, error = called(["measure", str(clip), "--trial", str(trial), "--out", str(sandbox / "out")], sandbox)
    seconds = time.monotonic() - start
    stray = [p for p in everything(sandbox) if p not in before and not p.startswith("out/")]
    ending, detail = ended(code, said, error)
    if stray:
        ending, detail = "stray files", ", ".join(stray[:5])
    elif left_over(sandbox / "out"):
        ending, detail = "half-written files", ", ".join(left_over(sandbox / "out")[:5])
    return Outcome(number=number, damage=damage, ending=ending, detail=detail, seconds=seconds)


def called(words: list[str], sandbox: Path) -> tuple[int, str, BaseException | None]:
    """Call the command line in this process; return the exit code, what was said, and a stray exception."""
    from click.testing import CliRunner

    from floorswing.cli import cli

    home = os.getcwd()
    os.chdir(sandbox / "cwd")
    try:
        result = CliRunner().invoke(
            cli, words, env={"TMPDIR": str(sandbox / "tmp"), "HOME": str(sandbox / "home")}, catch_exceptions=True
        )
    finally:
        os.chdir(home)
    error = result.exception if result.exception is not None and not isinstance(result.exception, SystemExit) else None
    return result.exit_code, result.stderr, error


def ended(code: int, said: str, error: BaseException | None) -> tuple[str, str]:
    """Return how a call ended, and a detail."""
    if error is not None:
        return "traceback", "".join(traceback.format_exception(error))[-1500:]
    if PROGRAM_FAILED in said:
        return "traceback", said[:1500]
    if code not in (0, 1, 2):
        return "exit code", f"{code}: {said}"
    lines = [line for line in said.splitlines() if line.strip()]
    if any(not line.startswith(("Warning: ", "Error: ")) for line in lines):
        return "several lines", said[:1000]
    if code and sum(line.startswith("Error: ") for line in lines) != 1:
        return "several lines", said[:1000]
    if any(ord(letter) < 32 for line in lines for letter in line):
        return "control characters", repr(said[:300])
    return ("measured", "") if code == 0 else ("refused", lines[-1][:300] if lines else "")


def everything(folder: Path) -> set[str]:
    """Return the files under a folder, relative to it."""
    return {str(path.relative_to(folder)) for path in folder.rglob("*")}


def left_over(out: Path) -> list[str]:
    """Return files and folders that were only meant to last while writing."""
    return [str(path.relative_to(out)) for path in out.rglob(".*")]


def try_trial(trial: bytes, commands: bytes, damage: str, number: int, sandbox: Path) -> Outcome:
    """Read one damaged trial file."""
    from floorswing.errors import TrialError
    from floorswing.trial import read_trial

    sandbox.mkdir(parents=True, exist_ok=True)
    path = sandbox / "trial.toml"
    path.write_bytes(trial)
    (sandbox / "commands.csv").write_bytes(commands)
    if not (sandbox / "pipe").exists():
        os.mkfifo(sandbox / "pipe")  # reading it waits for ever
    start = time.monotonic()
    try:
        read_trial(path)
        ending, detail = "measured", ""
    except TrialError as error:
        ending, detail = "refused", str(error)[:300]
        if "\n" in str(error) or any(ord(letter) < 32 for letter in str(error)):
            ending, detail = "several lines", repr(str(error)[:300])
        elif len(str(error)) > 2000:
            ending, detail = "long line", str(error)[:300]
    except BaseException as error:
        ending, detail = "traceback", "".join(traceback.format_exception(error))[-1500:]
    return Outcome(number=number, damage=damage, ending=ending, detail=detail, seconds=time.monotonic() - start)


def child(kind: str, first: int, last: int, seed: int, folder: Path) -> None:
    """Try a batch and print an outcome a line; each case is announced before it is tried."""
    resource.setrlimit(resource.RLIMIT_AS, (MOST_BYTES, MOST_BYTES))
    bases = base_clips(folder) if kind == "clips" else {}
    for number in range(first, last):
        sandbox = folder / f"case-{kind}"
        shutil.rmtree(sandbox, ignore_errors=True)
        print(json.dumps({"begun": number}), flush=True)
        if kind == "clips":
            outcome = try_clip(*damaged_clip(bases, seed, number), number, sandbox)
        else:
            outcome = try_trial(*damaged_trial(seed, number), number, sandbox)
        print(json.dumps(asdict(outcome)), flush=True)


# --- the watch, in the parent ---


def tried(kind: str, n: int, seed: int, folder: Path) -> Iterator[Outcome]:
    """Yield the outcome of every case, starting children again after a crash or a hang."""
    number = 0
    while number < n:
        for outcome in batch(kind, number, min(number + BATCH, n), seed, folder):
            number = outcome.number + 1
            yield outcome


def batch(kind: str, first: int, last: int, seed: int, folder: Path) -> Iterator[Outcome]:
    """Yield outcomes of one child until it ends, crashes or hangs."""
    words = [sys.executable, "-m", "bench.fuzz", "--child", kind, str(first), str(last), str(seed), str(folder)]
    process = subprocess.Popen(words, stdout=subprocess.PIPE, stderr=subprocess.PIPE, text=True)
    lines: queue.Queue[str | None] = queue.Queue()
    noise: collections.deque[str] = collections.deque(maxlen=5)
    assert process.stdout is not None
    assert process.stderr is not None
    threading.Thread(target=lambda: ([lines.put(x) for x in process.stdout], lines.put(None)), daemon=True).start()
    threading.Thread(target=lambda: noise.extend(process.stderr), daemon=True).start()
    begun: int | None = None
    while True:
        try:
            text = lines.get(timeout=60.0 if begun is None else LONGEST_S + 5.0)
        except queue.Empty:
            process.kill()
            process.wait()
            yield Outcome(number=first if begun is None else begun, damage="?", ending="hang", seconds=LONGEST_S + 5.0)
            return
        if text is None:
            break
        record = json.loads(text)
        if "begun" in record:
            begun = record["begun"]
        else:
            begun = None
            yield Outcome(**record)
    if process.wait() != 0 or begun is not None:
        ending = f"crash ({process.returncode})"
        yield Outcome(number=first if begun is None else begun, damage="?", ending=ending, detail="".join(noise))


def report(title: str, outcomes: list[Outcome]) -> int:
    """Print what became of the cases; return how many ended wrongly."""
    endings = collections.Counter(outcome.ending for outcome in outcomes)
    wrong = [outcome for outcome in outcomes if not outcome.right]
    slowest = max((outcome.seconds for outcome in outcomes), default=0.0)
    shares = ", ".join(f"{count} {ending}" for ending, count in endings.most_common())
    print(f"{title}: {len(outcomes)}; {shares}; slowest {slowest:.1f} s; wrong {len(wrong)}")
    for outcome in wrong[:20]:
        print(f"  {outcome.number} ({outcome.damage}) {outcome.ending}: {outcome.detail}")
    return len(wrong)


def main() -> None:
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("--clips", type=int, default=2000)
    parser.add_argument("--trials", type=int, default=5000)
    parser.add_argument("--seed", type=int, default=1)
    parser.add_argument("--child", nargs=5, metavar=("KIND", "FIRST", "LAST", "SEED", "FOLDER"), help=argparse.SUPPRESS)
    options = parser.parse_args()
    if options.child:
        kind, first, last, seed, folder = options.child
        child(kind, int(first), int(last), int(seed), Path(folder))
        return
    with tempfile.TemporaryDirectory() as temporary:
        folder = Path(temporary)
        base_clips(folder)
        wrong = report("damaged trial files", list(tried("trials", options.trials, options.seed, folder)))
        wrong += report("damaged clips", list(tried("clips", options.clips, options.seed, folder)))
    sys.exit(1 if wrong else 0)


if __name__ == "__main__":
    main()
