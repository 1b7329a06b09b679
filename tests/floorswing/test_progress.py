"""The bar: only on a terminal, only after two seconds."""

from __future__ import annotations

import io
import os

import pytest

from floorswing.progress import Bar, Board


class Screen(io.StringIO):
    def __init__(self, terminal: bool) -> None:
        super().__init__()
        self.terminal = terminal

    def isatty(self) -> bool:
        return self.terminal


def drawn(monkeypatch: pytest.MonkeyPatch, *, terminal: bool, seconds: list[float]) -> str:
    screen = Screen(terminal)
    monkeypatch.setattr("sys.stderr", screen)
    clock = iter([0.0, *seconds])
    with Bar("cork", clock=lambda: next(clock)) as bar:
        for number in range(len(seconds)):
            bar((number + 1) / len(seconds))
    return screen.getvalue()


def test_a_terminal_sees_a_bar_after_two_seconds(monkeypatch: pytest.MonkeyPatch):
    text = drawn(monkeypatch, terminal=True, seconds=[1.0, 2.5])
    assert "cork" in text
    assert "100%" in text
    assert text.endswith("\n")


def test_short_work_shows_nothing(monkeypatch: pytest.MonkeyPatch):
    assert drawn(monkeypatch, terminal=True, seconds=[0.5, 1.0, 1.9]) == ""


def test_a_file_sees_nothing(monkeypatch: pytest.MonkeyPatch):
    assert drawn(monkeypatch, terminal=False, seconds=[1.0, 5.0, 9.0]) == ""


def board(monkeypatch: pytest.MonkeyPatch, *, terminal: bool = True) -> tuple[Screen, Board, list[float]]:
    screen = Screen(terminal)
    monkeypatch.setattr("sys.stderr", screen)
    now = [0.0]
    return screen, Board(["cork", "lino", "felt"], clock=lambda: now[0]), now


def test_a_bar_for_each_clip_that_is_going_on_and_one_for_all(monkeypatch: pytest.MonkeyPatch):
    screen, bars, now = board(monkeypatch)
    with bars:
        bars("cork", 0.1)
        assert screen.getvalue() == ""
        now[0] = 3.0
        bars("cork", 0.5)
        now[0] = 3.2
        bars("lino", 0.25)
        drawn = screen.getvalue().split("\x1b[2F")[-1]
        assert [line.split()[0] for line in drawn.splitlines() if line.startswith(("cork", "lino", "0"))] == [
            "cork",
            "lino",
            "0",
        ]
        assert "0 of 3 clips" in drawn
        assert " 25%  0:10 left" in drawn
        bars.finish("cork")
        assert screen.getvalue().endswith("\x1b[3F\x1b[J")
        bars("cork", 0.9)
        bars("lino", 0.5)
        assert "1 of 3 clips" in screen.getvalue()
        assert "cork" not in screen.getvalue().split("\x1b[3F")[-1]
    assert screen.getvalue().endswith("\x1b[2F\x1b[J")


def test_bars_fit_a_narrow_screen(monkeypatch: pytest.MonkeyPatch):
    monkeypatch.setattr("shutil.get_terminal_size", lambda: os.terminal_size((40, 3)))
    screen, bars, now = board(monkeypatch)
    now[0] = 3.0
    bars("a name that is far too long for a screen so narrow", 0.5)
    lines = [line.replace("\x1b[K", "").replace("\x1b[J", "") for line in screen.getvalue().splitlines()]
    assert all(len(line) < 40 for line in lines)


def test_a_file_sees_no_bars(monkeypatch: pytest.MonkeyPatch):
    screen, bars, now = board(monkeypatch, terminal=False)
    with bars:
        now[0] = 9.0
        bars("cork", 0.5)
        bars.finish("cork")
    assert screen.getvalue() == ""
