"""What may be named as a clip."""

from __future__ import annotations

from pathlib import Path

import pytest

from floorswing.clip_names import find_clips, place_of, stem_of
from floorswing.errors import FileError


def touch(folder: Path, *names: str) -> None:
    for name in names:
        (folder / name).parent.mkdir(parents=True, exist_ok=True)
        (folder / name).write_bytes(b"")


def test_a_folder_stands_for_its_clips_in_order_of_name(tmp_path: Path):
    touch(tmp_path, "b.MP4", "a.mov", "notes.txt", ".hidden.mp4", "later/c.mkv", ".trash/d.mp4", "b.mp4.part")
    found = find_clips([tmp_path])
    assert [Path(clip).relative_to(tmp_path).as_posix() for clip in found] == ["a.mov", "b.MP4", "later/c.mkv"]


def test_what_is_named_twice_is_measured_once(tmp_path: Path):
    touch(tmp_path, "a.mp4", "odd.name")
    assert find_clips([tmp_path / "a.mp4", tmp_path, tmp_path / "odd.name"]) == [
        tmp_path / "a.mp4",
        tmp_path / "odd.name",
    ]


def test_what_names_no_clip_is_said(tmp_path: Path):
    with pytest.raises(FileError, match=r"holds no clip; accepted: .*mp4"):
        find_clips([tmp_path])
    with pytest.raises(FileError, match=r"no\.mp4: no such file"):
        find_clips([tmp_path / "no.mp4"])
    with pytest.raises(FileError, match="no clip given"):
        find_clips([])
    assert find_clips(["there/no.mp4"], here=False) == [Path("there/no.mp4")]


@pytest.mark.parametrize(
    ("url", "stem"),
    [
        ("https://store/day%201/run.mp4?key=a/b", "run"),
        ("s3://bucket/run.two.mov", "run.two"),
        ("http://store/", "store"),
        ("memory://a/b/#x", "b"),
    ],
)
def test_a_url_stays_as_it_is_and_has_a_stem(url: str, stem: str):
    assert place_of(url) == url
    assert stem_of(place_of(url)) == stem


def test_a_path_is_a_path():
    assert place_of("c:/clips/run.mp4") == Path("c:/clips/run.mp4")
    assert stem_of(Path("clips/run.2.mp4")) == "run.2"
