"""Progress bars for work that turns out to take a while, and only where somebody watches."""

from __future__ import annotations

import math
import shutil
import sys
import time
from collections.abc import Callable, Sequence
from contextlib import AbstractContextManager
from types import TracebackType
from typing import Any

import click

WAIT_S = 2.0
"""Work that is over sooner than this shows no bar."""
DRAW_EVERY_S = 0.1
STEPS = 1000


class Bar(AbstractContextManager["Bar"]):
    """A bar on standard error that appears after two seconds, if standard error is a terminal.

    Parameters
    ----------
    label : str
        What is being done.
    clock : callable
        Returns seconds; for tests.
    """

    def __init__(self, label: str, clock: Callable[[], float] = time.monotonic) -> None:
        self._label = label
        self._clock = clock
        self._started_s = clock()
        self._bar: Any = None
        self._watched = sys.stderr.isatty()

    def __call__(self, fraction: float) -> None:
        """Show that `fraction` (0 to 1) of the work is done."""
        if not self._watched:
            return
        if self._bar is None:
            if self._clock() - self._started_s < WAIT_S:
                return
            self._bar = click.progressbar(length=STEPS, label=self._label, file=sys.stderr)
            self._bar.__enter__()
        self._bar.update(max(0, round(min(fraction, 1.0) * STEPS) - self._bar.pos))

    def __exit__(
        self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None
    ) -> None:
        if self._bar is not None:
            self._bar.__exit__(kind, error, trace)
            self._bar = None


class Board(AbstractContextManager["Board"]):
    """A bar for each piece of work that is going on and one for all of it, on standard error if that is a terminal.

    Parameters
    ----------
    names : sequence of str
        All the work there is; with a single name there is no bar for all.
    clock : callable
        Returns seconds; for tests.
    """

    def __init__(self, names: Sequence[str], clock: Callable[[], float] = time.monotonic) -> None:
        self._names = list(names)
        self._clock = clock
        self._started_s = clock()
        self._drawn_s = -math.inf
        self._n_drawn = 0
        self._going: dict[str, float] = {}
        self._done: set[str] = set()
        self._watched = sys.stderr.isatty()

    def __call__(self, name: str, fraction: float) -> None:
        """Show that `fraction` (0 to 1) of the work called `name` is done."""
        if not self._watched or name in self._done:
            return
        self._going[name] = min(max(fraction, 0.0), 1.0)
        now_s = self._clock()
        if now_s - self._started_s >= WAIT_S and now_s - self._drawn_s >= DRAW_EVERY_S:
            self._drawn_s = now_s
            self._draw()

    def finish(self, name: str) -> None:
        """Take away the bar of `name`, so that other lines can be written; its work is done."""
        self._going.pop(name, None)
        self._done.add(name)
        self.clear()

    def clear(self) -> None:
        """Take away all bars; the next one that is told brings them back."""
        if self._n_drawn:
            click.echo(f"\x1b[{self._n_drawn}F\x1b[J", nl=False, file=sys.stderr)
        self._n_drawn = 0
        self._drawn_s = -math.inf

    def __exit__(
        self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None
    ) -> None:
        self.clear()

    def _draw(self) -> None:
        up = f"\x1b[{self._n_drawn}F" if self._n_drawn else ""
        size = shutil.get_terminal_size()
        lines = self._lines(size.columns - 1)[-max(size.lines - 1, 1) :]
        click.echo(up + "".join(f"{line}\x1b[K\n" for line in lines) + "\x1b[J", nl=False, file=sys.stderr)
        self._n_drawn = len(lines)

    def _lines(self, width: int) -> list[str]:
        rows = [(name, fraction, "") for name, fraction in self._going.items()]
        if len(self._names) > 1:
            share = (len(self._done) + sum(self._going.values())) / len(self._names)
            rows.append((f"{len(self._done)} of {len(self._names)} clips", share, self._left(share)))
        longest = min(max(len(name) for name, _, _ in rows), max(width // 3, 8))
        return [_line(name, fraction, note, longest, width) for name, fraction, note in rows]

    def _left(self, share: float) -> str:
        """Return how long the rest will take if it goes on like this."""
        spent_s = self._clock() - self._started_s
        if share < 0.02:
            return ""
        left_s = round(spent_s * (1.0 - share) / share)
        hours, minutes, seconds = left_s // 3600, left_s // 60 % 60, left_s % 60
        return f"{hours}:{minutes:02d}:{seconds:02d} left" if hours else f"{minutes}:{seconds:02d} left"


def _line(name: str, fraction: float, note: str, longest: int, width: int) -> str:
    shown = name if len(name) <= longest else f"{name[: longest - 1]}…"
    room = max(width - longest - 22, 4)
    full = round(fraction * room)
    return f"{shown:<{longest}}  [{'#' * full}{'-' * (room - full)}] {100.0 * fraction:3.0f}%  {note}".rstrip()[:width]
