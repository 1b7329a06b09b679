"""The rooms of the project and what each may import."""

from __future__ import annotations

import ast
import tomllib
from collections.abc import Iterator
from pathlib import Path

import pytest

ROOT = Path(__file__).resolve().parent.parent
ROOMS = ("vision", "calib", "floorswing")
MAY_NOT_IMPORT = {
    "vision": {"calib", "floorswing", "click", "tomllib", "demo_videos", "tests", "bench"},
    "calib": {"vision", "floorswing", "click", "tomllib", "demo_videos", "tests", "bench", "cv2", "av"},
    "floorswing": {"tests", "bench", "demo_videos"},
}
CALIB_MAY_USE = {"numpy", "scipy", "calib"}
CALIB_HAS_NO = {
    "time",
    "datetime",
    "pathlib",
    "os",
    "io",
    "csv",
    "json",
    "sys",
    "subprocess",
    "socket",
    "logging",
}
NETWORK = {"socket", "http", "urllib", "ftplib", "smtplib", "ssl", "requests", "asyncio", "xmlrpc"}


def modules_of(room: str) -> Iterator[Path]:
    return (path for path in sorted((ROOT / room).rglob("*.py")))


def imported(path: Path) -> set[str]:
    """Return the top-level names that a module imports, anywhere in it."""
    names: set[str] = set()
    for node in ast.walk(ast.parse(path.read_text(encoding="utf-8"))):
        if isinstance(node, ast.Import):
            names |= {alias.name.split(".")[0] for alias in node.names}
        elif isinstance(node, ast.ImportFrom):
            assert node.level == 0, f"{path}: relative import"
            names.add((node.module or "").split(".")[0])
    return names


def calls_of(path: Path) -> set[str]:
    """Return the bare names that a module calls."""
    tree = ast.parse(path.read_text(encoding="utf-8"))
    return {
        node.func.id
        for node in ast.walk(tree)
        if isinstance(node, ast.Call) and isinstance(node.func, ast.Name)
    }


@pytest.mark.parametrize("room", ROOMS)
def test_rooms_import_only_what_they_may(room: str):
    assert any(modules_of(room))
    for path in modules_of(room):
        assert not imported(path) & MAY_NOT_IMPORT[room], path


def test_calib_is_numpy_and_scipy_and_nothing_else():
    standard = set(__import__("sys").stdlib_module_names)
    for path in modules_of("calib"):
        assert imported(path) - standard <= CALIB_MAY_USE, path
        assert not imported(path) & CALIB_HAS_NO, path
        assert "open" not in calls_of(path), path


@pytest.mark.parametrize("room", ["vision", "calib"])
def test_neither_vision_nor_calib_prints(room: str):
    for path in modules_of(room):
        assert not calls_of(path) & {"print", "input"}, path


def test_one_module_opens_clips_and_one_writes_them():
    users = [path.relative_to(ROOT) for room in ROOMS for path in modules_of(room) if "av" in imported(path)]
    assert users == [Path("vision/frames.py"), Path("floorswing/report/recorder.py")]
    recorder = (ROOT / "floorswing" / "report" / "recorder.py").read_text(encoding="utf-8")
    assert recorder.count("av.open(") == 1
    assert 'mode="w"' in recorder
    for room in ROOMS:
        for path in modules_of(room):
            assert "VideoCapture" not in path.read_text(encoding="utf-8"), path


@pytest.mark.parametrize("room", ROOMS)
def test_nothing_uses_the_network(room: str):
    for path in modules_of(room):
        assert not imported(path) & NETWORK, path


def test_every_dependency_is_declared_and_every_declared_one_used():
    standard = set(__import__("sys").stdlib_module_names)
    used = {name for room in ROOMS for path in modules_of(room) for name in imported(path)}
    distribution = {"cv2": "opencv-python-headless"}
    needed = {distribution.get(name, name) for name in used - standard - set(ROOMS) - {"__future__"}}
    assert needed == declared()


def declared() -> set[str]:
    project = tomllib.loads((ROOT / "pyproject.toml").read_text(encoding="utf-8"))["project"]
    entries = [*project["dependencies"], *project["optional-dependencies"]["cluster"]]
    return {entry.split(">=")[0].split("[")[0] for entry in entries}


def test_every_dependency_has_its_reason_in_the_decisions():
    text = (ROOT / "docs" / "decisions.md").read_text(encoding="utf-8")
    for name in declared():
        assert f"`{name}`" in text, name


def test_the_packages_listed_are_those_there_are():
    setuptools = tomllib.loads((ROOT / "pyproject.toml").read_text(encoding="utf-8"))["tool"]["setuptools"]
    found = {
        ".".join(path.parent.relative_to(ROOT).parts)
        for room in ROOMS
        for path in (ROOT / room).rglob("__init__.py")
    }
    assert set(setuptools["packages"]) == found | {"demo_videos"}
