"""Files appear whole or not at all, and nothing outside the output folder is touched."""

from __future__ import annotations

import os
from pathlib import Path

import pytest
from hypothesis import given
from hypothesis import strategies as st

from floorswing import writing
from floorswing.errors import FileError
from floorswing.writing import (
    check_output_folder,
    clear_leftovers,
    distinct_names,
    safe_name,
    write_folder,
    write_whole,
)

MARK = "measurement.json"
NEW = {"turns.csv": "new turns", MARK: "new"}


def everything_in(folder: Path) -> list[str]:
    return sorted(str(path.relative_to(folder)) for path in folder.rglob("*"))


def test_write_whole_writes_and_replaces(tmp_path: Path):
    path = tmp_path / "fit.json"
    assert write_whole(path, "a\nä") == path
    assert path.read_bytes() == "a\nä".encode()
    write_whole(path, b"b")
    assert path.read_bytes() == b"b"
    assert everything_in(tmp_path) == ["fit.json"]


@pytest.mark.parametrize("stop", [KeyboardInterrupt, OSError(28, "No space left on device")])
def test_write_whole_keeps_the_old_file_when_stopped(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch, stop: BaseException
):
    path = tmp_path / "fit.json"
    path.write_text("old")

    def stopped(descriptor: int) -> None:
        raise stop

    monkeypatch.setattr(os, "fsync", stopped)
    with pytest.raises((KeyboardInterrupt, FileError)):
        write_whole(path, "new")
    assert path.read_text() == "old"
    assert everything_in(tmp_path) == ["fit.json"]


def test_write_whole_names_what_is_wrong(tmp_path: Path):
    with pytest.raises(FileError, match="no such file or directory"):
        write_whole(tmp_path / "no" / "fit.json", "x")
    with pytest.raises(FileError, match="is a folder"):
        write_whole(tmp_path, "x")


def test_write_whole_refuses_a_link_out_of_its_folder_and_follows_one_within(tmp_path: Path):
    inside, outside = tmp_path / "inside", tmp_path / "outside.txt"
    inside.mkdir()
    outside.write_text("precious")
    (inside / "fit.json").symlink_to(outside)
    with pytest.raises(FileError, match="outside its folder"):
        write_whole(inside / "fit.json", "new")
    assert outside.read_text() == "precious"
    (inside / "real.json").write_text("old")
    (inside / "link.json").symlink_to(inside / "real.json")
    write_whole(inside / "link.json", "new")
    assert (inside / "real.json").read_text() == "new"
    assert (inside / "link.json").is_symlink()


def test_write_folder_makes_the_folders_on_the_way(tmp_path: Path):
    folder = write_folder(tmp_path / "a" / "b", "clip", NEW, mark=MARK)
    assert folder == tmp_path / "a" / "b" / "clip"
    assert everything_in(folder) == [MARK, "turns.csv"]


def test_write_folder_replaces_an_older_result_and_keeps_other_files(tmp_path: Path):
    write_folder(tmp_path, "clip", {"turns.csv": "old", MARK: "old"}, mark=MARK)
    (tmp_path / "clip" / "notes.txt").write_text("mine")
    write_folder(tmp_path, "clip", NEW, mark=MARK)
    assert everything_in(tmp_path) == ["clip", f"clip/{MARK}", "clip/notes.txt", "clip/turns.csv"]
    assert (tmp_path / "clip" / "turns.csv").read_text() == "new turns"
    assert (tmp_path / "clip" / "notes.txt").read_text() == "mine"


def test_write_folder_leaves_foreign_folders_and_files_alone(tmp_path: Path):
    (tmp_path / "clip").mkdir()
    (tmp_path / "clip" / "holiday.jpg").write_text("precious")
    with pytest.raises(FileError, match="holds other files"):
        write_folder(tmp_path, "clip", NEW, mark=MARK)
    (tmp_path / "file").write_text("precious")
    with pytest.raises(FileError, match="a file is in the way"):
        write_folder(tmp_path, "file", NEW, mark=MARK)
    assert everything_in(tmp_path) == ["clip", "clip/holiday.jpg", "file"]


@pytest.mark.parametrize("stop_at", ["_write_flushed", "_swap"])
def test_write_folder_leaves_the_older_result_when_interrupted(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch, stop_at: str
):
    write_folder(tmp_path, "clip", {"turns.csv": "old", MARK: "old"}, mark=MARK)

    def stopped(*arguments: object) -> None:
        raise KeyboardInterrupt

    monkeypatch.setattr(writing, stop_at, stopped)
    with pytest.raises(KeyboardInterrupt):
        write_folder(tmp_path, "clip", NEW, mark=MARK)
    assert everything_in(tmp_path) == ["clip", f"clip/{MARK}", "clip/turns.csv"]
    assert (tmp_path / "clip" / "turns.csv").read_text() == "old"


def test_write_folder_puts_the_older_result_back_when_the_swap_fails(tmp_path: Path, monkeypatch: pytest.MonkeyPatch):
    write_folder(tmp_path, "clip", {"turns.csv": "old", MARK: "old"}, mark=MARK)
    rename, calls = os.rename, []

    def second_fails(source: Path, target: Path) -> None:
        calls.append(source)
        if len(calls) == 2:
            raise OSError(5, "Input/output error")
        rename(source, target)

    monkeypatch.setattr(os, "rename", second_fails)
    with pytest.raises(FileError, match="input/output error"):
        write_folder(tmp_path, "clip", NEW, mark=MARK)
    assert (tmp_path / "clip" / "turns.csv").read_text() == "old"
    assert everything_in(tmp_path) == ["clip", f"clip/{MARK}", "clip/turns.csv"]


def test_write_folder_refuses_a_link_that_leaves_the_output_folder(tmp_path: Path):
    out, outside = tmp_path / "out", tmp_path / "outside"
    out.mkdir()
    outside.mkdir()
    (outside / MARK).write_text("precious")
    (out / "clip").symlink_to(outside)
    with pytest.raises(FileError, match="outside its folder"):
        write_folder(out, "clip", NEW, mark=MARK)
    assert (outside / MARK).read_text() == "precious"
    assert everything_in(out) == ["clip"]


def test_a_link_inside_an_older_result_is_not_written_through(tmp_path: Path):
    precious = tmp_path / "precious.txt"
    precious.write_text("precious")
    write_folder(tmp_path / "out", "clip", NEW, mark=MARK)
    (tmp_path / "out" / "clip" / "turns.csv").unlink()
    (tmp_path / "out" / "clip" / "turns.csv").symlink_to(precious)
    write_folder(tmp_path / "out", "clip", NEW, mark=MARK)
    assert precious.read_text() == "precious"
    assert not (tmp_path / "out" / "clip" / "turns.csv").is_symlink()


def test_hidden_names_that_are_links_already_are_not_written_through(tmp_path: Path):
    out, outside = tmp_path / "out", tmp_path / "outside"
    out.mkdir()
    outside.mkdir()
    (outside / "turns.csv").write_text("precious")
    (out / f".clip.{os.getpid()}").symlink_to(outside)
    (out / f".fit.json.{os.getpid()}").symlink_to(outside / "turns.csv")
    write_folder(out, "clip", NEW, mark=MARK)
    write_whole(out / "fit.json", "new")
    assert everything_in(out) == ["clip", f"clip/{MARK}", "clip/turns.csv", "fit.json"]
    assert not (out / "clip").is_symlink()
    assert (out / "fit.json").read_text() == "new"
    assert (outside / "turns.csv").read_text() == "precious"
    assert everything_in(outside) == ["turns.csv"]


def test_leftovers_are_not_put_back_through_a_link(tmp_path: Path):
    out, outside = tmp_path / "out", tmp_path / "outside"
    (out / ".clip.77.old").mkdir(parents=True)
    (out / ".clip.77.old" / "planted.txt").write_text("planted")
    outside.mkdir()
    (out / "clip").symlink_to(outside)
    clear_leftovers(out, alive=lambda process: False)
    assert everything_in(outside) == []


def test_check_output_folder(tmp_path: Path):
    check_output_folder(tmp_path)
    check_output_folder(tmp_path / "new" / "deeper")
    (tmp_path / "file").write_text("")
    for path in (tmp_path / "file", tmp_path / "file" / "below"):
        with pytest.raises(FileError, match="is not a folder"):
            check_output_folder(path)
    (tmp_path / "dangling").symlink_to(tmp_path / "nowhere")
    with pytest.raises(FileError, match="is not a folder"):
        check_output_folder(tmp_path / "dangling")


@pytest.mark.parametrize(
    ("stem", "name"),
    [
        ("cork_calm", "cork_calm"),
        ("Korkfußboden 2", "Korkfußboden 2"),
        ("床テスト", "床テスト"),
        ("a/b\\c:d", "a_b_c_d"),
        ("..", "clip"),
        (".", "clip"),
        ("", "clip"),
        (".hidden", "hidden"),
        ("--out", "out"),
        ("clip. ", "clip"),
        ("nul", "nul_"),
        ("COM1.a", "COM1.a_"),
        ("tab\there", "tab_here"),
    ],
)
def test_safe_name(stem: str, name: str):
    assert safe_name(stem) == name


@given(st.text())
def test_safe_name_is_one_plain_path_component(stem: str):
    name = safe_name(stem)
    assert name == Path(name).name
    assert not name.startswith((".", "-"))
    assert len(os.fsencode(name)) < 200
    assert name.isprintable()


@given(st.lists(st.sampled_from(["a", "A", "a-2", "b", "a/", "..", "clip"])))
def test_distinct_names_are_distinct_whatever_the_case(stems: list[str]):
    names = distinct_names(stems)
    assert len({name.casefold() for name in names}) == len(stems)


def test_distinct_names_are_numbered_in_order():
    assert distinct_names(["run", "rest", "run", "run-2"]) == ["run", "rest", "run-2", "run-2-2"]


def test_what_a_killed_process_left_is_finished_or_removed(tmp_path: Path):
    def make(folder: str, **files: str) -> None:
        (tmp_path / folder).mkdir()
        for name, content in files.items():
            (tmp_path / folder / name).write_text(content)

    make(".a.123", turns="half-written")
    make(".b.123.old", turns="before", fit="ours")  # killed between the two renames
    make("c", turns="new")
    make(".c.123.old", turns="before", fit="ours")  # killed after both
    make(".d.77", turns="being written")
    make(".git", turns="not ours")
    make(".e.123x", turns="not ours")
    clear_leftovers(tmp_path, alive=lambda process: process == 77)
    assert sorted(path.name for path in tmp_path.iterdir()) == [".d.77", ".e.123x", ".git", "b", "c"]
    assert (tmp_path / "b" / "turns").read_text() == "before"
    assert (tmp_path / "c" / "turns").read_text() == "new"
    assert (tmp_path / "c" / "fit").read_text() == "ours"
    clear_leftovers(tmp_path / "no")


def test_a_process_that_runs_is_known_to_run(tmp_path: Path):
    (tmp_path / f".a.{os.getpid()}").mkdir()
    clear_leftovers(tmp_path)
    assert (tmp_path / f".a.{os.getpid()}").exists()
