"""The tool as it is installed: a wheel, in an environment of its own, run from an unrelated folder."""

from __future__ import annotations

import shutil
import subprocess
import sys
import sysconfig
import zipfile
from pathlib import Path

import pytest

from floorswing.demo_clips import demo_clips

ROOT = Path(__file__).resolve().parent.parent
PARTS = ("vision", "calib", "floorswing", "demo_videos", "pyproject.toml", "README.md")


@pytest.fixture(scope="module")
def wheel(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """Build the wheel from a copy, so that nothing is left behind here."""
    copy = tmp_path_factory.mktemp("copy")
    for part in PARTS:
        if (ROOT / part).is_dir():
            shutil.copytree(ROOT / part, copy / part, ignore=shutil.ignore_patterns("__pycache__"))
        else:
            shutil.copy(ROOT / part, copy / part)
    command = [
        sys.executable,
        "-m",
        "pip",
        "wheel",
        "--quiet",
        "--no-deps",
        "--no-build-isolation",
        "-w",
        "dist",
        ".",
    ]
    subprocess.run(command, cwd=copy, check=True, capture_output=True)
    (path,) = (copy / "dist").glob("*.whl")
    return path


@pytest.fixture(scope="module")
def installed(wheel: Path, tmp_path_factory: pytest.TempPathFactory) -> Path:
    """Install the wheel into a new environment that borrows the libraries of this one; return its scripts."""
    home = tmp_path_factory.mktemp("environment")
    subprocess.run([sys.executable, "-m", "venv", "--without-pip", str(home)], check=True)
    python = home / "bin" / "python"
    ask = "import sysconfig; print(sysconfig.get_path('purelib'))"
    site = Path(
        subprocess.run([python, "-c", ask], check=True, capture_output=True, text=True).stdout.strip()
    )
    (site / "libraries.pth").write_text(sysconfig.get_path("purelib") + "\n")
    install = [
        sys.executable,
        "-m",
        "pip",
        "--python",
        str(python),
        "install",
        "--quiet",
        "--no-deps",
        str(wheel),
    ]
    subprocess.run(install, check=True, capture_output=True)
    return home / "bin"


@pytest.mark.slow
def test_the_wheel_holds_the_clips_and_no_renderer(wheel: Path):
    names = zipfile.ZipFile(wheel).namelist()
    for one in demo_clips():
        for path in (one.clip, one.trial, one.truth):
            assert f"demo_videos/{path.name}" in names
    assert not [name for name in names if name.startswith(("demo_videos/render", "tests/", "bench/"))]


@pytest.mark.slow
def test_an_installed_wheel_runs_the_demo_from_any_folder(installed: Path, tmp_path: Path):
    run = [installed / "floorswing", "demo", "--clip", "cork_calm"]
    result = subprocess.run(run, cwd=tmp_path, capture_output=True, text=True, timeout=300)
    assert result.returncode == 0, result.stderr
    where = subprocess.run(
        [installed / "python", "-c", "import floorswing; print(floorswing.__file__)"],
        cwd=tmp_path,
        capture_output=True,
        text=True,
        check=True,
    )
    assert str(installed.parent) in where.stdout
    assert "none invented" in result.stdout
    assert (tmp_path / "floorswing-demo" / "cork_calm" / "turns.csv").is_file()
