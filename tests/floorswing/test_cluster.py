"""The same batch on a real Dask scheduler with two worker processes on this machine."""

from __future__ import annotations

import os
import signal
import sys
from collections.abc import Callable, Iterator
from pathlib import Path
from typing import Any

import pytest
from click.testing import CliRunner

from bench.clips import shorten
from floorswing.cli import cli
from floorswing.cluster import run_on_cluster
from floorswing.demo_clips import demo_clips
from floorswing.errors import FileError
from floorswing.files import read_turns
from floorswing.workers import WorkerDied

distributed = pytest.importorskip("distributed", reason="the extra floorswing[cluster] is not installed")
pytestmark = [
    pytest.mark.filterwarnings("ignore::ResourceWarning", "ignore::pytest.PytestUnraisableExceptionWarning"),
    pytest.mark.filterwarnings("ignore::DeprecationWarning", "ignore::FutureWarning"),
]


@pytest.fixture(scope="module")
def scheduler() -> Iterator[str]:
    root = str(Path(__file__).resolve().parent.parent.parent)
    before = os.environ.get("PYTHONPATH")
    os.environ["PYTHONPATH"] = os.pathsep.join([root, *([before] if before else [])])
    settings: dict[str, Any] = {"n_workers": 2, "threads_per_worker": 1, "processes": True, "dashboard_address": None}
    try:
        with distributed.LocalCluster(**settings) as cluster:
            yield cluster.scheduler_address
    finally:
        if before is None:
            del os.environ["PYTHONPATH"]
        else:
            os.environ["PYTHONPATH"] = before


def double_or_die(job: int, tell: Callable[[float], None]) -> int:
    tell(0.5)
    if job == 2:
        raise ZeroDivisionError("two")
    if job == 3:
        os.kill(os.getpid(), signal.SIGKILL)
    return 2 * job


@pytest.mark.slow
@pytest.mark.skipif(sys.platform == "win32", reason="there is no SIGKILL")
def test_clips_by_path_and_url_give_what_this_process_gives(scheduler: str, tmp_path: Path):
    (lino,) = (one for one in demo_clips() if one.name == "lino_mixed")
    shorten(lino.clip, 5.0, tmp_path / "a.mp4")
    (tmp_path / "b.mp4").write_bytes((tmp_path / "a.mp4").read_bytes())
    said = lino.trial.read_text(encoding="utf-8").split("[commands]")[0]
    (tmp_path / "trial.toml").write_text(f"{said}[commands]\nwheel_deg = [95, 190]\n", encoding="utf-8")

    def measure(out: str, *more: object) -> tuple[int, str, str]:
        named = [tmp_path / "a.mp4", f"file://{tmp_path}/b.mp4", tmp_path / "no.mp4", *more]
        result = CliRunner().invoke(
            cli, ["measure", *map(str, named), "--trial", str(tmp_path / "trial.toml"), "--out", str(tmp_path / out)]
        )
        return result.exit_code, result.stdout, result.stderr

    code, stdout, stderr = measure("far", "--scheduler", scheduler)
    assert code == 1
    assert "3 clips: 1 failed, 2 measured" in stdout
    assert f"Error: {tmp_path / 'no.mp4'}: " in stderr
    assert f"Warning: file://{tmp_path}/b.mp4: " in stderr
    code, stdout, _ = measure("far", "--scheduler", scheduler)
    assert "3 clips: 1 failed, 2 measured (2 of them before)" in stdout
    (tmp_path / "no.mp4").write_bytes(b"not a clip")
    code, _, _ = measure("near", "--workers", "1")
    assert code == 1
    for name in ("a", "b"):
        pairs = zip(read_turns(tmp_path / "far" / name), read_turns(tmp_path / "near" / name), strict=True)
        for far, near in list(pairs)[:2]:
            assert far.commanded_wheel_deg == near.commanded_wheel_deg
            # The order of sums differs between processes; a hundredth of the uncertainty is far more than that.
            assert abs(far.heading_change_deg - near.heading_change_deg) < 1e-4


@pytest.mark.slow
@pytest.mark.skipif(sys.platform == "win32", reason="there is no SIGKILL")
def test_what_fails_on_the_cluster_fails_alone(scheduler: str):
    told: list[tuple[int, float]] = []
    outcomes = dict(run_on_cluster(double_or_die, range(5), scheduler, lambda *what: told.append(what)))
    assert {n: outcomes[n] for n in (0, 1, 4)} == {0: 0, 1: 2, 4: 8}
    assert isinstance(outcomes[2], ZeroDivisionError)
    assert isinstance(outcomes[3], WorkerDied)
    assert "KilledWorker" in str(outcomes[3])
    assert (0, 0.5) in told


def test_no_scheduler_there_is_one_line(monkeypatch: pytest.MonkeyPatch):
    monkeypatch.setattr("floorswing.cluster.CONNECT_S", 1.0)
    with pytest.raises(FileError, match="no scheduler answers there") as raised:
        next(run_on_cluster(double_or_die, [1], "tcp://127.0.0.1:9"))
    assert "\n" not in str(raised.value)
    with pytest.raises(FileError, match="no scheduler answers there"):
        next(run_on_cluster(double_or_die, [1], "nonsense://x"))
