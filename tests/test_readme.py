"""The README's examples, run as they stand."""

from __future__ import annotations

import os
import re
import shlex
import subprocess
import sys
from pathlib import Path

import pytest

ROOT = Path(__file__).resolve().parent.parent
README = (ROOT / "README.md").read_text(encoding="utf-8")


def blocks(language: str) -> list[str]:
    return re.findall(rf"^```{language}\n(.*?)^```", README, flags=re.MULTILINE | re.DOTALL)


def examples() -> list[str]:
    """Return the lines that call the tool, in order; the two set-up lines are not among them."""
    return [line for block in blocks("console") for line in block.splitlines() if line.startswith("floorswing ")]


@pytest.fixture
def clone(tmp_path: Path) -> Path:
    """Return a folder that looks like a clone as far as the examples go, so that they write elsewhere."""
    (tmp_path / "demo_videos").symlink_to(ROOT / "demo_videos")
    return tmp_path


def test_the_set_up_is_two_lines():
    setting_up = [line for block in blocks("console") for line in block.splitlines() if ".venv" in line]
    assert len(setting_up) == 2
    assert setting_up[0].endswith("floorswing demo")
    assert setting_up[1].endswith("-m pytest -n 2")


@pytest.mark.slow
def test_every_example_command_runs(clone: Path):
    assert len(examples()) >= 9
    for line in examples():
        command = [sys.executable, "-m", *shlex.split(line)]
        result = subprocess.run(command, cwd=clone, capture_output=True, text=True, timeout=300)
        assert result.returncode == 0, (line, result.stderr)
        assert result.stdout.strip(), line
    assert (clone / "results" / "rubber_rough" / "fit.json").is_file()


@pytest.mark.slow
def test_every_python_example_runs(clone: Path):
    (code,) = blocks("python")
    environment = {**os.environ, "PYTHONPATH": str(ROOT)}
    result = subprocess.run(
        [sys.executable, "-c", code], cwd=clone, capture_output=True, text=True, timeout=300, env=environment
    )
    assert result.returncode == 0, result.stderr
    assert len(result.stdout.splitlines()) == 16
