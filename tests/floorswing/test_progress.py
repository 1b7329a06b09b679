"""The bar: only on a terminal, only after two seconds."""

from __future__ import annotations

import io

import pytest

from floorswing.progress import Bar


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
