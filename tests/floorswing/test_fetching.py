"""Clips by URL, fetched through fsspec from its store in memory and from a server on this machine."""

from __future__ import annotations

import functools
import http.server
import threading
from collections.abc import Iterator
from pathlib import Path

import pytest

from floorswing.errors import FileError
from floorswing.fetching import local_file

fsspec = pytest.importorskip("fsspec", reason="the extra floorswing[cluster] is not installed")


@pytest.fixture
def stored() -> str:
    with fsspec.open("memory://clips/run.mp4", "wb") as file:
        file.write(b"clip" * 1000)
    return "memory://clips/run.mp4"


def test_a_path_is_used_as_it_is(tmp_path: Path):
    with local_file(tmp_path / "a.mp4") as path:
        assert path == tmp_path / "a.mp4"


def test_a_url_is_a_file_for_as_long_as_it_is_needed(stored: str):
    with local_file(stored) as path:
        assert path.read_bytes() == b"clip" * 1000
    assert not path.parent.exists()


def test_what_is_too_large_is_not_fetched(stored: str):
    with pytest.raises(FileError, match="is larger than"), local_file(stored, most_bytes=3999):
        pass
    with local_file(stored, most_bytes=4000) as path:
        assert path.stat().st_size == 4000


@pytest.mark.parametrize("url", ["memory://clips/no.mp4", "nosuch://clips/run.mp4", "file:///no/such/run.mp4"])
def test_what_cannot_be_fetched_is_one_line(url: str):
    with pytest.raises(FileError, match="cannot be fetched") as raised, local_file(url):
        pass
    assert str(raised.value).startswith(url)
    assert "\n" not in str(raised.value)


class Quiet(http.server.SimpleHTTPRequestHandler):
    def log_message(self, *_: object) -> None:
        pass


@pytest.fixture
def server(tmp_path: Path) -> Iterator[str]:
    (tmp_path / "run.mp4").write_bytes(b"clip" * 1000)
    serving = http.server.ThreadingHTTPServer(("127.0.0.1", 0), functools.partial(Quiet, directory=tmp_path))
    thread = threading.Thread(target=serving.serve_forever)
    thread.start()
    yield f"http://127.0.0.1:{serving.server_port}"
    serving.shutdown()
    thread.join()
    serving.server_close()


@pytest.mark.filterwarnings("ignore::ResourceWarning", "ignore::pytest.PytestUnraisableExceptionWarning")
def test_over_http(server: str):
    pytest.importorskip("aiohttp", reason="fsspec needs aiohttp for http")
    with local_file(f"{server}/run.mp4") as path:
        assert path.read_bytes() == b"clip" * 1000
    with pytest.raises(FileError, match="cannot be fetched"), local_file(f"{server}/no.mp4"):
        pass
