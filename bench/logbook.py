"""What the logbook costs when it is full: ``python -m bench.logbook [--trials 2000] [--turns 50] [--kills 100]``.

Fills a logbook with simulated trials through the same call that ``logbook add`` makes, then prints the time to add one
more, to list, select and chart, and whether processes that are killed while adding lose what they acknowledged. The
baseline in the same run is a plain SQLite insert of the same texts.
"""

from __future__ import annotations

import argparse
import datetime
import random
import signal
import sqlite3
import statistics
import subprocess
import sys
import tempfile
import time
from dataclasses import replace
from pathlib import Path

from floorswing.files import read_measurement
from floorswing.logbook.selection import Selection, parsed, trials
from floorswing.logbook.store import TEXTS, add_folder, add_trial, now, opened
from floorswing.logbook.trend import QUANTITIES, trend
from tests.floorswing.folders import measured

ADD = """
import sys
from floorswing.logbook.store import add
for folder in sys.argv[2:]:
    add(sys.argv[1], [folder])
    print(folder, flush=True)
"""


def median_ms(work, times: int = 5) -> float:
    spent = []
    for _ in range(times):
        start = time.perf_counter()
        work()
        spent.append(1e3 * (time.perf_counter() - start))
    return statistics.median(spent)


def filled(path: Path, folder: Path, n_trials: int) -> None:
    """Fill a logbook with copies of one measured folder that differ in surface, day and a note in the texts."""
    measurement = read_measurement(folder)
    texts = {name: (folder / name).read_text(encoding="utf-8") for name in TEXTS}
    first = datetime.date(2024, 1, 1)
    with opened(path, must_exist=False) as connection:
        connection.execute("PRAGMA synchronous = OFF")
        for n in range(n_trials):
            surface = ("cork tile", "lino", "rubber mat")[n % 3]
            floor = replace(measurement.trial.floor, surface=surface)
            one = replace(measurement, name=f"clip{n}", trial=replace(measurement.trial, floor=floor))
            own = texts | {
                "measurement.json": texts["measurement.json"].replace('"warnings": []', f'"warnings": ["{n}"]')
            }
            day = (first + datetime.timedelta(days=n // 3)).isoformat()
            add_trial(connection, one, own, filmed_on=day, note="", added_at=now())


def survived(path: Path, folders: list[Path], kills: int) -> tuple[int, int]:
    """Kill processes that add; return how many acknowledged trials there were, and how many of them were lost."""
    rng, said_in_all, lost = random.Random(1), 0, 0
    for k in range(kills):
        book = path.with_name(f"killed{k}.sqlite")
        process = subprocess.Popen(
            [sys.executable, "-c", ADD, str(book), *map(str, folders)], stdout=subprocess.PIPE, text=True
        )
        assert process.stdout is not None
        first = process.stdout.readline() if k % 4 else ""
        time.sleep(rng.uniform(0.0, 0.1))
        process.send_signal(signal.SIGKILL)
        said = {Path(line).name for line in (first + process.stdout.read()).split()}
        process.wait()
        process.stdout.close()
        if not book.exists():
            continue
        with opened(book, must_exist=False) as connection:
            kept = {one.name for one in trials(connection, Selection())}
            assert connection.execute("PRAGMA integrity_check").fetchone()[0] == "ok"
        said_in_all += len(said)
        lost += len(said - kept)
    return said_in_all, lost


def main() -> None:
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--trials", type=int, default=2000)
    parser.add_argument("--turns", type=int, default=50)
    parser.add_argument("--kills", type=int, default=100)
    given = parser.parse_args()
    with tempfile.TemporaryDirectory() as place:
        folder, path = Path(place), Path(place) / "book.sqlite"
        blocks = max(given.turns // 8, 1)
        clips = [measured(folder, f"clip{n}", seed=n, blocks=blocks) for n in range(8)]
        filled(path, clips[0], given.trials)
        with opened(path) as connection:
            n_turns = connection.execute("SELECT count(*) FROM turn").fetchone()[0]
            print(f"{given.trials} trials, {n_turns} turns, {path.stat().st_size / 1e6:.0f} MB")
            later = iter(clips[1:])
            print(f"add one trial             {median_ms(lambda: add_folder(connection, next(later))):8.1f} ms")
            plain = sqlite3.connect(folder / "plain.sqlite")
            plain.execute("PRAGMA journal_mode = WAL")
            plain.execute("PRAGMA synchronous = FULL")
            plain.execute("CREATE TABLE text (content TEXT)")
            texts = [((clips[0] / name).read_text(),) for name in TEXTS]

            def insert() -> None:
                with plain:
                    plain.executemany("INSERT INTO text VALUES (?)", texts)

            print(f"  plain insert of its texts {median_ms(insert):6.1f} ms")
            print(f"list all                  {median_ms(lambda: trials(connection, Selection())):8.1f} ms")
            one = parsed(["surface=cork tile", "since=2025-01-01"])
            print(f"list one surface, a year  {median_ms(lambda: trials(connection, one)):8.1f} ms")
            for quantity in QUANTITIES:
                spent = median_ms(lambda quantity=quantity: trend(connection, Selection(), quantity), 3)
                print(f"trend of {quantity:16} {spent:8.1f} ms")
        said, lost = survived(path, clips, given.kills)
        print(f"{given.kills} processes killed while adding: {said} trials acknowledged, {lost} lost")


if __name__ == "__main__":
    main()
